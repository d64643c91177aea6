"""What is allowed and yet doubtful is said; bounds that contradict each other are refused. All cases invented."""

import pytest

import reconcile

HALL = """
reconcile: 1
domains: {fluid: {unit: m3/h}}
streams:
  inlet: outside -> hall
  main:  hall -> outside
  sub_a: hall -> outside
  sub_b: hall -> outside
meters:
  M0: {reads: inlet.flow, unit: m3/h, sigma: 0.3 m3/h}
  M1: {reads: main.flow, unit: m3/h, sigma: 0.2 m3/h}
  A: {reads: sub_a.flow, unit: m3/h, sigma: 0.1 m3/h}
  B: {reads: sub_b.flow, unit: m3/h, sigma: 0.1 m3/h}
"""


@pytest.fixture
def load(tmp_path):
    def write(text):
        path = tmp_path / "case.yaml"
        path.write_text(text, "utf-8")
        return reconcile.load_case(path)

    return write


def codes(result):
    return [n.code for n in result.notices]


def test_a_parent_and_its_children_on_one_side_of_a_node(load):
    case = load(HALL)
    result = case.run({"M0": 20.2, "M1": 20.0, "A": 12.05, "B": 8.0})
    notice = next(n for n in result.notices if n.code == "counted-twice")
    assert "A + B equals M1 within 1 %" in notice.message
    assert "'hall'" in notice.message
    assert "counted-twice" not in codes(case.run({"M0": 30.2, "M1": 10.0, "A": 12.05, "B": 8.0}))


def test_the_sum_must_hold_in_every_snapshot(load):
    result = load(HALL).run({"M0": [20.2, 30.0], "M1": [20.0, 10.0], "A": [12.05, 12.0], "B": [8.0, 8.0]})
    assert "counted-twice" not in codes(result)


def test_a_sigma_above_the_reading_is_said_and_the_reading_kept(load):
    case = load(HALL.replace("sigma: 0.1 m3/h}\n  B", "sigma: 3 m3/h}\n  B"))
    result = case.run({"M0": 20.2, "M1": 10.0, "A": 2.0, "B": 8.0})
    notice = next(n for n in result.notices if n.code == "sigma-above-reading")
    assert notice.message == "A = 2 m3/h with sigma 3: the reading says almost nothing. Kept."
    assert result.snapshot(0).reading("A").reading == 2.0


def test_bounds_in_conflict_name_a_smallest_set(load):
    text = HALL + (
        "bounds:\n  inlet.flow: at most 45 m3/h\n  main.flow: at least 40 m3/h\n"
        "  sub_a.flow: at least 8 m3/h\n  sub_b.flow: at most 100 m3/h\n"
    )
    with pytest.raises(reconcile.InputError) as refused:
        load(text)
    (problem,) = refused.value.problems
    assert problem.code == "bounds-conflict"
    assert problem.message == (
        "inlet.flow at most 45 m3/h, main.flow at least 40 m3/h, sub_a.flow at least 8 m3/h: "
        "cannot hold together with the balances"
    )
    assert problem.where.line == text.splitlines().index("bounds:") + 1


def test_a_single_bound_against_the_balances(load):
    text = HALL + "known: {inlet.flow: 10 m3/h}\nbounds: {main.flow: at least 12 m3/h}\n"
    with pytest.raises(reconcile.InputError, match="the balances leave no value for it"):
        load(text.replace("  M0: {reads: inlet.flow, unit: m3/h, sigma: 0.3 m3/h}\n", ""))


def test_bounds_that_can_hold_together_are_accepted(load):
    case = load(
        HALL + "bounds: {inlet.flow: at most 48 m3/h, main.flow: at least 40 m3/h, sub_a.flow: at least 8 m3/h}\n"
    )
    assert "bound-violated" in codes(case.run({"M0": 20.2, "M1": 10.0, "A": 9.0, "B": 1.0}))
