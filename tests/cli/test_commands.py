"""The command line, run as its user does."""

from __future__ import annotations

import json
import shutil

import pytest
from click.testing import CliRunner

from reconcile.cli import main


@pytest.fixture
def reconcile():
    runner = CliRunner()

    def run(*words):
        return runner.invoke(main, [str(w) for w in words], catch_exceptions=False)

    return run


@pytest.fixture
def skid(datasets, tmp_path):
    folder = tmp_path / "skid"
    shutil.copytree(datasets / "membrane_skid", folder)
    return folder


def test_run_prints_the_verdict_first(reconcile, skid):
    done = reconcile("run", skid)
    assert done.exit_code == 0
    lines = done.stdout.splitlines()
    assert lines[0] == "Membrane skid with recycle (invented)"
    assert lines[2].startswith("✗ 6 readings, 3 checks: do not agree")
    assert max(map(len, lines)) <= 100


def test_strict_turns_disagreement_into_an_exit_code(reconcile, skid):
    assert reconcile("run", skid, "--strict").exit_code == 1
    (skid / "readings.csv").write_text("F,R,D,P,T,B\n50.3,150.6,201.2,39.8,161.0,10.1\n")
    assert reconcile("run", skid, "--strict").exit_code == 0


def test_bad_input_is_exit_code_2_with_every_problem(reconcile, skid):
    text = (skid / "case.yaml").read_text()
    text = text.replace("sigma: 0.5 kg/h", "sigma: 1 %").replace("reads: bleed.flow", "reads: bled.flow")
    (skid / "case.yaml").write_text(text)
    done = reconcile("run", skid)
    assert done.exit_code == 2
    assert "[percent-of-what]" in done.stderr
    assert "[unknown-variable]" in done.stderr
    assert len(done.stderr.splitlines()) == 2
    assert "Traceback" not in done.output + done.stderr


def test_a_reading_that_names_no_variable(reconcile, skid):
    text = (skid / "case.yaml").read_text().replace("reads: bleed.flow", "reads: bled.flow")
    (skid / "case.yaml").write_text(text)
    done = reconcile("check", skid)
    assert done.exit_code == 2
    assert "case.yaml:19" in done.stderr
    assert "bleed.flow" in done.stderr


def test_missing_case(reconcile, tmp_path):
    done = reconcile("run", tmp_path / "nothing.yaml")
    assert done.exit_code == 2
    assert "nothing.yaml" in done.stderr


def test_readings_with_a_misspelt_column(reconcile, skid):
    (skid / "readings.csv").write_text("F,R,D,P,T,Bb\n50.3,150.6,201.2,39.8,161.0,10.1\n")
    done = reconcile("run", skid)
    assert done.exit_code == 2
    assert "Bb" in done.stderr


def test_leaving_out_needs_a_reason(reconcile, skid):
    done = reconcile("run", skid, "--exclude", "R")
    assert done.exit_code == 2
    assert "[no-reason]" in done.stderr
    done = reconcile("run", skid, "--exclude", "R", "--because", "drifts")
    assert done.exit_code == 0
    assert "R: drifts" in done.stdout
    assert "costs 1 of 3 checks" in done.stdout


def test_json_is_the_summary_file(reconcile, skid, tmp_path):
    out = tmp_path / "out"
    printed = json.loads(reconcile("run", skid, "--json").stdout)
    reconcile("run", skid, "--out", out)
    assert printed == json.loads((out / "summary.json").read_text())
    assert printed["snapshots"][0]["suspects"][0]["fault"] == "R"


def test_check_echoes_and_runs_nothing(reconcile, skid):
    done = reconcile("check", skid)
    assert done.exit_code == 0
    assert "no mistakes found" in done.stdout
    assert "rows: 1" in done.stdout
    assert "χ²" not in done.stdout


def test_coverage(reconcile, datasets):
    done = reconcile("coverage", datasets / "crystalliser")
    assert done.exit_code == 0
    assert "Nothing in this network would notice an error of W" in done.stdout
    assert "F = R = mixer.leak" in done.stdout
    as_json = json.loads(reconcile("coverage", datasets / "crystalliser", "--json").stdout)
    assert as_json["checks"] == 2


def test_domains_and_schema(reconcile):
    assert "fluid" in reconcile("domains").stdout
    schema = json.loads(reconcile("schema").stdout)
    assert "fluid" in json.dumps(schema)


def test_a_plugin_file_joins(reconcile, tmp_path, write_case):
    plugin = tmp_path / "heads.py"
    plugin.write_text(
        "from reconcile import Domain, hookimpl\n"
        "class Heads(Domain):\n"
        "    name = 'heads'\n"
        "    def build(self, network, system, options):\n"
        "        count = system.variables('count', network.streams, unit='1/h')\n"
        "        system.require(network.incidence @ count == 0, names=network.nodes, kind='heads')\n"
        "@hookimpl\n"
        "def reconcile_domains():\n"
        "    return [Heads]\n"
    )
    case = write_case(
        "reconcile: 1\ntitle: Turnstiles (invented)\ndomains: {heads: {}}\n"
        "streams: {a: outside -> hall, b: hall -> outside}\n"
        "meters:\n  A: {reads: a.count, unit: 1/h, sigma: 2 1/h}\n  B: {reads: b.count, unit: 1/h, sigma: 2 1/h}\n"
        "readings: readings.csv\n",
        "A,B\n100,103\n",
    )
    done = reconcile("run", case, "--plugin", plugin)
    assert done.exit_code == 0, done.stderr
    assert "2 readings, 1 check: agree" in done.stdout


def test_a_plugin_that_raises_is_named(reconcile, tmp_path, skid):
    plugin = tmp_path / "broken.py"
    plugin.write_text("raise RuntimeError('half written')\n")
    done = reconcile("run", skid, "--plugin", plugin)
    assert done.exit_code == 4
    assert "plugin 'broken'" in done.stderr
    assert "half written" in done.stderr


def test_unwritable_folder_leaves_nothing(reconcile, skid, tmp_path):
    blocker = tmp_path / "file"
    blocker.write_text("")
    done = reconcile("run", skid, "--out", blocker / "deeper")
    assert done.exit_code == 2
    assert "[cannot-write]" in done.stderr


def test_help_names_every_command(reconcile):
    text = reconcile("--help").stdout
    for command in ("run", "check", "coverage", "domains", "schema"):
        assert command in text
    assert "Exit codes" in text
