"""A case may ask for the version of a domain that it was written with."""

import pytest

import reconcile

CASE = """reconcile: 1
domains: {{fluid: {{unit: kg/h}}}}
needs: {{{needs}}}
streams: {{a: outside -> tank, b: tank -> outside}}
meters:
  A: {{reads: a.flow, unit: kg/h, sigma: 1 kg/h}}
"""


@pytest.fixture
def load(tmp_path):
    def write(needs):
        path = tmp_path / "case.yaml"
        path.write_text(CASE.format(needs=needs), "utf-8")
        return reconcile.load_case(path)

    return write


@pytest.mark.parametrize("version", ["0", "0.1", "0.0.10"])
def test_an_older_or_equal_version_is_enough(load, version):
    assert load(f"fluid: at least {version}").tags == ("A",)


def test_a_domain_that_is_too_old_is_refused_with_both_versions(load):
    with pytest.raises(reconcile.InputError) as refused:
        load("fluid: at least 99.10")
    (problem,) = refused.value.problems
    assert problem.code == "domain-too-old"
    assert "needs domain 'fluid' in version 99.10 or later; installed is " in problem.message
    assert (problem.where.line, problem.where.column) == (3, 16)


@pytest.mark.parametrize("text", ["99.10", "at least two", ">= 1"])
def test_a_version_that_cannot_be_read(load, text):
    with pytest.raises(reconcile.InputError, match=r"write fluid: at least 1\.2"):
        load(f"fluid: {text!r}" if text.startswith(">") else f"fluid: {text}")


def test_a_version_of_a_domain_that_is_not_used(load):
    with pytest.raises(reconcile.InputError, match="did you mean 'fluid'"):
        load("fluids: at least 1")
