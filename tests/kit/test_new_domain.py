"""The untouched stub installs, is discovered, runs its example and passes its tests."""

from __future__ import annotations

import os
import subprocess
import sys

import pytest
from click.testing import CliRunner
from written_domain import files, module

import reconcile
from reconcile.cli import main
from reconcile.domains import load_plugins
from reconcile.scaffold import new_domain


def command(*words):
    return CliRunner().invoke(main, [str(w) for w in words], catch_exceptions=False)


@pytest.fixture(scope="module")
def installed(tmp_path_factory):
    """A folder with the stub, and an environment in which it is installed without touching this one."""
    pytest.importorskip("hatchling")
    folder = tmp_path_factory.mktemp("author")
    done = command("new-domain", "side_flow", "--into", folder, "--author", "Ada")
    assert done.exit_code == 0, done.stderr
    target = folder / "installed"
    stub = folder / "reconcile-side-flow"
    subprocess.run(
        [sys.executable, "-m", "pip", "install", "-q", "--no-deps", "--no-build-isolation", "--no-index",
         "--disable-pip-version-check", "--target", target, stub],
        check=True, capture_output=True, timeout=300,
    )  # fmt: skip
    inherited = [p for p in (os.environ.get("PYTHONPATH"),) if p]
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(target), *inherited])}
    return stub, environment


def run(installed, *words):
    stub, environment = installed
    return subprocess.run(
        [sys.executable, *words], cwd=stub, env=environment, capture_output=True, text=True, encoding="utf-8", timeout=600
    )  # fmt: skip


COMMAND = ("-c", "from reconcile.cli import main; main()")


def test_the_stub_is_discovered(installed):
    done = run(installed, *COMMAND, "domains")
    assert done.returncode == 0
    line = next(x for x in done.stdout.splitlines() if x.startswith("side_flow"))
    assert "reconcile-side-flow" in line
    assert done.stderr == ""


def test_the_stub_runs_its_example(installed):
    done = run(installed, *COMMAND, "run", "example", "--json")
    assert done.returncode == 0, done.stderr
    assert '"agrees"' in done.stdout


def test_the_stub_passes_its_own_tests(installed):
    done = run(installed, "-m", "pytest", "-q", "-p", "no:cacheprovider")
    assert done.returncode == 0, done.stdout
    assert "22 passed" in done.stdout
    assert "skipped" not in done.stdout


def test_the_stub_is_put_on_trial_by_the_command(installed):
    done = run(installed, *COMMAND, "check-domain", "tests/trials/two_cells.yaml", "--runs", "200")
    assert done.returncode == 0, done.stdout
    assert done.stdout.startswith("Domain 'side_flow': 20 checks pass, 0 fail, 0 not judged")


def test_the_help_gives_the_reason_for_shared_errors():
    text = " ".join(command("new-domain", "--help").stdout.split())
    assert "noticed from 11.5 mL/min on, which is useless" in text
    assert "from 2.4 mL/min on" in text


@pytest.mark.parametrize(
    ("name", "says"),
    [
        ("Side-Flow", "try 'side_flow'"),
        ("class", "no word of Python"),
        ("9lives", "try 'lives'"),
        ("../away", "try 'away'"),
        ("", "cannot name a domain"),
        ("fluid", "installed already"),
    ],
)
def test_a_bad_name_is_refused_and_nothing_is_written(tmp_path, name, says):
    done = command("new-domain", name, "--into", tmp_path)
    assert done.exit_code == 2
    assert says in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_an_existing_folder_is_left_alone(tmp_path):
    folder = tmp_path / "reconcile-mine"
    folder.mkdir()
    (folder / "notes.txt").write_text("mine")
    done = command("new-domain", "mine", "--into", tmp_path)
    assert done.exit_code == 2
    assert "nothing in it was touched" in done.stderr
    assert [p.name for p in folder.iterdir()] == ["notes.txt"]


def test_a_folder_that_is_not_there_is_refused(tmp_path):
    done = command("new-domain", "mine", "--into", tmp_path / "nowhere")
    assert done.exit_code == 2
    assert "there is no folder" in done.stderr


def test_an_author_that_breaks_the_file_is_refused(tmp_path):
    done = command("new-domain", "mine", "--into", tmp_path, "--author", 'A "quoted" author')
    assert done.exit_code == 2
    assert list(tmp_path.iterdir()) == []


def test_a_failure_half_way_leaves_nothing(tmp_path, monkeypatch):
    from reconcile import scaffold

    monkeypatch.setitem(scaffold.LAYOUT, "last.txt", "no_such_template")
    with pytest.raises(FileNotFoundError):
        new_domain("mine", tmp_path, load_plugins())
    assert list(tmp_path.iterdir()) == []


# ------------------------------------------------------------------ two plugins in one case

TWO = """
reconcile: 1
title: Dialysate that is warmed (invented)
domains:
  dialysate: {}
  energy: {unit: W, heat_capacity: 4.18 kJ/(kg K), density: 1.0 kg/L}
nodes:
  filter: {membrane: true}
  warmer: {heat: true}
streams:
  fresh: {path: outside -> warmer, fresh: true}
  warm:  {path: warmer -> filter, fresh: true}
  spent: filter -> outside
meters:
  QF: {reads: fresh.flow,         unit: mL/min, sigma: 2.5 mL/min}
  QW: {reads: warm.flow,          unit: mL/min, sigma: 2.5 mL/min}
  QS: {reads: spent.flow,         unit: mL/min, sigma: 2.5 mL/min}
  UF: {reads: filter.ultrafiltrate, unit: mL/min, sigma: 0.2 mL/min}
  T1: {reads: fresh.temperature,  unit: degC, sigma: 0.1 K}
  T2: {reads: warm.temperature,   unit: degC, sigma: 0.1 K}
  P:  {reads: warmer.duty,        unit: W,    sigma: 3 W}
"""


def test_two_plugins_combine_into_one_solution(write_case):
    made = module(files()["dialysate.py"])
    case = reconcile.load_case(write_case(TWO), modules=[made])
    # 0.5 kg/min x 4.18 kJ/(kg K) x 17 K = 35.53 kJ/min = 592.17 W
    result = case.run({"QF": 500, "QW": 500, "QS": 508.3, "UF": 8.3, "T1": 20, "T2": 37, "P": 592.1666666666666})
    assert result.objective[0] < 1e-12
    assert {r.writer for r in case.model.system.row_blocks} == {"dialysate", "energy"}
    # A power that is off by 30.033 W stands against flows of the other domain. By hand, to first order: 592.17 W times
    # 1.445 of 500 mL/min (three flows) and 0.1414 of 17 K, and 3 W of its own: 30.033^2 / (1.711^2 + 4.926^2 + 3^2).
    off = case.run({"QF": 500, "QW": 500, "QS": 508.3, "UF": 8.3, "T1": 20, "T2": 37, "P": 622.2})
    assert off.objective[0] == pytest.approx(24.92, rel=0.01)
    assert off.snapshot(0).reading("P").word == "tied"  # a temperature may be off just as well


def test_equal_names_of_two_plugins_are_refused(write_case):
    made = module(files()["dialysate.py"])
    text = TWO.replace(
        "  energy: {unit: W, heat_capacity: 4.18 kJ/(kg K), density: 1.0 kg/L}", "  fluid: {unit: mL/min}"
    )
    text = text.replace("warmer: {heat: true}", "warmer: {}")
    text = "\n".join(x for x in text.splitlines() if not x.strip().startswith(("T1", "T2", "P:")))
    with pytest.raises(reconcile.PluginError, match="'dialysate' and 'fluid'") as caught:
        reconcile.load_case(write_case(text), modules=[made])
    assert "fresh.flow" in str(caught.value)
