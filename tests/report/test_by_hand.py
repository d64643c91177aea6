"""A node worked by hand: its numbers are those that a person with a pocket calculator gets."""

from __future__ import annotations

import re

import numpy as np
import pytest
from click.testing import CliRunner

import reconcile
from reconcile.cli import main
from reconcile.report.by_hand import explain_node, nodes_of


@pytest.fixture(scope="module")
def skid():
    from pathlib import Path

    root = Path(__file__).resolve().parents[2]
    return reconcile.load_case(root / "datasets" / "membrane_skid").run()


def test_closure_spread_and_ratio(skid):
    # tee: 50.30 + 158.60 - 201.20 = 7.70; sqrt(0.5^2 + 1.5^2 + 2.0^2) = sqrt(6.5) = 2.5495; 7.70 / 2.5495 = 3.0202.
    text = explain_node(skid, "tee")
    assert re.search(r"\+ feed\.flow +F +\+50\.30 +0\.50", text)
    assert re.search(r"- discharge\.flow +D +-201\.20 +2\.00", text)
    assert re.search(r"sum +\+7\.70 +2\.55 +0 \(closed\)", text)
    assert "sqrt(0.50^2 + 1.50^2 + 2.00^2) = 2.55 kg/h" in text
    assert "+7.70 / 2.55 = +3.02 spreads" in text


def test_what_each_reading_would_give_way_if_this_were_the_only_balance(skid):
    # -(+1) 0.25 7.70 / 6.5 = -0.296; -(+1) 2.25 7.70 / 6.5 = -2.665; -(-1) 4.00 7.70 / 6.5 = +4.738.
    text = explain_node(skid, "tee")
    assert re.search(r"F +kg/h +50\.30 +0\.50 +-0\.296", text)
    assert re.search(r"R +kg/h +158\.60 +1\.5 +-2\.67", text)
    assert re.search(r"D +kg/h +201\.20 +2\.0 +\+4\.74", text)


def test_adjusted_terms_are_those_of_the_result(skid):
    line = next(x for x in explain_node(skid, "module").splitlines() if "permeate.flow" in x)
    assert float(line.split()[-1]) == pytest.approx(-skid.snapshot().variable("permeate.flow").adjusted, abs=0.006)


def test_products_have_the_spread_of_their_factors(datasets):
    # 121.5 x 1.03 = 125.145; sqrt((1.03 2.4)^2 + (121.5 0.02)^2) = sqrt(2.472^2 + 2.43^2) = 3.466.
    result = reconcile.load_case(datasets / "isolated_kidney").run()
    text = explain_node(result, "kidney", result.labels.index("slow probe"))
    assert re.search(r"\+ artery\.flow x artery\.creatinine +Qa x Ca +\+125\.1\d +3\.47", text)


def test_the_only_unread_variable_is_solved_for(datasets):
    # splitter: liquor + wash - recycle - purge = 0, so purge = 39.30 + 2.00 - 31.10 = 10.20,
    # +/- sqrt(0.4^2 + 0.05^2 + 0.4^2) = 0.568.
    text = explain_node(reconcile.load_case(datasets / "crystalliser").run(), "splitter")
    assert "it gives purge.flow = 10.20 ± 0.57 kg/h" in text


def test_shared_errors_enter_the_spread(write_case):
    path = write_case(
        "reconcile: 1\ntitle: Two meters on one reference (invented)\ndomains: {fluid: {unit: kg/h}}\n"
        "streams: {in: outside -> pot, out: pot -> outside}\n"
        "meters:\n  A: {reads: in.flow, unit: kg/h, sigma: 3 kg/h}\n  B: {reads: out.flow, unit: kg/h, sigma: 4 kg/h}\n"
        "shared_errors: {bench: {sigma: 5 kg/h, meters: [A, B]}}\nreadings: readings.csv\n",
        "A,B\n100,103\n",
    )
    # Alone sqrt(9 + 25 + 16 + 25) = 8.66; the shared part cancels in a difference: sqrt(9 + 16) = 5.
    text = explain_node(reconcile.load_case(path).run(), "pot")
    assert "= 8.66 kg/h" in text.replace("\n  ", " ")
    assert "(covariances): 5.00 kg/h" in text
    assert "-3.00 / 5.00 = -0.60 spreads" in text


def test_text_fits_a_terminal(datasets):
    for name in ("membrane_skid", "crystalliser", "isolated_kidney"):
        result = reconcile.load_case(datasets / name).run()
        for node in nodes_of(result):
            assert max(map(len, explain_node(result, node).splitlines())) <= 100


def test_unknown_node_is_refused_with_a_guess(skid):
    with pytest.raises(reconcile.InputError, match=r"did you mean 'splitter'\?.*unknown-node"):
        explain_node(skid, "spliter")


def test_command_prints_the_same(skid, datasets):
    run = CliRunner().invoke(main, ["explain", "node", "tee", str(datasets / "membrane_skid")])
    assert run.exit_code == 0
    assert run.output == explain_node(skid, "tee")


def test_command_takes_the_folder_it_stands_in(skid, datasets, monkeypatch):
    monkeypatch.chdir(datasets / "membrane_skid")
    assert CliRunner().invoke(main, ["explain", "node", "module"]).output == explain_node(skid, "module")


def test_command_refuses_a_snapshot_that_is_not_there(datasets):
    run = CliRunner().invoke(main, ["explain", "node", "tee", str(datasets / "membrane_skid"), "--snapshot", "2"])
    assert run.exit_code == 2
    assert "unknown-snapshot" in run.output


def test_adjustments_alone_close_the_balance(skid):
    # What the text calls `alone` is the least-squares answer to one balance: together it takes away the whole closure.
    rows = re.findall(r"^  (\w+) +kg/h +[\d.]+ +[\d.]+ +([+-][\d.]+) ", explain_node(skid, "splitter"), re.MULTILINE)
    alone = {tag: float(v) for tag, v in rows}
    assert -alone["R"] + alone["T"] - alone["B"] == pytest.approx(7.70, abs=0.02)
    assert np.all(np.abs(list(alone.values())) > 0)
