"""Mistakes in conformance files: one message each, what was expected and what to write; and the command's exit codes."""

import pytest
from click.testing import CliRunner
from written_domain import files

from reconcile.cli import main

DOCUMENTED = files()
TRIAL = DOCUMENTED["trials/bench.yaml"]


@pytest.fixture
def put_on_trial(tmp_path):
    def put(trial, *words):
        (tmp_path / "bench.yaml").write_text(trial, encoding="utf-8")
        (tmp_path / "dialysate.py").write_text(DOCUMENTED["dialysate.py"], encoding="utf-8")
        words = words or ("--plugin", str(tmp_path / "dialysate.py"))
        return CliRunner().invoke(
            main, ["check-domain", str(tmp_path / "bench.yaml"), *words, "--runs", "20"], catch_exceptions=False
        )

    return put


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("inflows:", "inflow:", "did you mean 'inflows'?"),
        ("conformance: 1", "conformance: 2", "write conformance: 1"),
        ("domain: dialysate", "domain: dialysat", "did you mean 'dialysate'?"),
        ("domain: dialysate\n", "domain: fluid\n", "domain 'fluid' writes no balance in this case"),
        ("truth:", "truth: 7\nfalsehood:", "a block of 'key: value' lines"),
        ("says: [dialysate, membrane]", "says: []", "says"),
    ],
)
def test_a_mistake_in_the_file_is_exit_code_2(put_on_trial, old, new, says):
    assert TRIAL.count(old) == 1
    done = put_on_trial(TRIAL.replace(old, new))
    assert done.exit_code == 2
    assert says in done.stderr
    assert "bench.yaml" in done.stderr or "domain" in done.stderr


def test_a_file_that_is_not_there(put_on_trial, tmp_path):
    done = CliRunner().invoke(main, ["check-domain", str(tmp_path / "nothing.yaml")])
    assert done.exit_code == 2
    assert "there is no such file" in done.stderr


def test_a_case_that_is_no_case(put_on_trial, tmp_path):
    (tmp_path / "list.yaml").write_text("- 1\n")
    head, tail = TRIAL.split("case:\n", 1)
    done = put_on_trial(head + "case: list.yaml\n" + tail[tail.index("truth:") :])
    assert done.exit_code == 2
    assert "is no case" in done.stderr


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("  drain.urea: 10 mmol/L", "  drain.ura: 10 mmol/L", "truth names 'drain.ura', which is no variable; did you mean 'drain.urea'?"),
        ("  drain.urea: 10 mmol/L", "  drain.urea: ten", "truth of drain.urea"),
        ("  drain.urea: 10 mmol/L", "  drain.urea: 10 kg", "write a value in mmol/L"),
        ("  pump urea:  ", "  pomp urea:  ", "there is no balance 'pomp urea'; did you mean 'pump urea'?"),
        ("[spent.flow]", "[spent.urea]", "cannot flow into"),
        ("[spent.flow]", "[spent.flow * spent.flow * spent.urea]", "no product of two"),
        ("in_other_units:", "dependent: [pump]\nin_other_units:", "dependent names 'pump', which is no balance"),
        ("in_other_units:", "dependent: [pump urea]\nin_other_units:", "is declared dependent, but follows from no others"),
    ],
)  # fmt: skip
def test_a_wrong_promise_fails_its_check_in_words(put_on_trial, old, new, says):
    assert TRIAL.count(old) == 1
    done = put_on_trial(TRIAL.replace(old, new))
    assert done.exit_code == 1
    assert says in done.stdout


def test_a_refusal_that_says_something_else_is_told(put_on_trial):
    done = put_on_trial(TRIAL.replace("says: [dialysate, membrane]", "says: [dialysate, lung]"))
    assert done.exit_code == 1
    assert "does not say 'lung'" in done.stdout
