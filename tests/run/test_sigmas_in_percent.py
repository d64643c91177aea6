"""Explanations do not depend on how a sigma is written: in percent of the reading, or as the number that this is."""

import pytest

import reconcile

READ = {"F": 50.3, "R": 158.6, "D": 201.2, "P": 39.8, "T": 161.0, "B": 10.1}
SIGMA = {"F": 0.5, "R": 1.5, "D": 2.0, "P": 0.4, "T": 1.6, "B": 0.2}
FLOW = {"F": "feed", "R": "recycle", "D": "discharge", "P": "permeate", "T": "retentate", "B": "bleed"}


def explained(write_case, sigma, **readings):
    text = (
        "reconcile: 1\ntitle: Skid (invented)\ndomains: {fluid: {unit: kg/h}}\nsettings: {percent_at: reading}\n"
        "streams:\n  feed: outside -> tee\n  recycle: splitter -> tee\n  discharge: tee -> module\n"
        "  permeate: module -> outside\n  retentate: module -> splitter\n  bleed: splitter -> outside\nmeters:\n"
    )
    text += "\n".join(f"  {t}: {{reads: {FLOW[t]}.flow, unit: kg/h, sigma: {sigma(t)}}}" for t in READ)
    return reconcile.load_case(write_case(text)).run({**READ, **readings}).snapshot(0).accounts


def test_percent_or_number(write_case):
    number = explained(write_case, lambda t: f"{SIGMA[t]!r} kg/h")
    percent = explained(write_case, lambda t: f"{100 * SIGMA[t] / READ[t]!r} % of reading")
    assert number.standing
    for a, b in zip(number.ranked, percent.ranked, strict=True):
        assert [f.candidate.name for f in a.alternatives[0].faults] == [
            f.candidate.name for f in b.alternatives[0].faults
        ]
        # the size that a fault may have follows the sigma at the adjusted value, a few percent from the reading
        assert b.probability == pytest.approx(a.probability, rel=0.1, abs=0.005)
    assert percent.nothing_wrong == pytest.approx(number.nothing_wrong, rel=0.1)


def test_no_fault_is_taken_for_impossible(write_case):
    # A reading ten sigmas off is named with its like, not put aside as improbably large.
    found = explained(write_case, lambda t: f"{100 * SIGMA[t] / READ[t]!r} % of reading", F=55.3, R=150.4)
    best = found.standing[0].alternatives[0]
    assert [f.candidate.name for f in best.faults] == ["F"]
    assert best.probability > 0.3
