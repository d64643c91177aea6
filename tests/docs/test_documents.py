"""What README.md and DEVELOPERS.md show is run as it stands there."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from reconcile.cli import main
from reconcile.testing import CHECKS

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text("utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text("utf-8")
FILE = re.compile(r"\A# (\S+\.\w+)\n")


def blocks(text, language):
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.M | re.S)


def commands(text):
    """Lines of all shell blocks, without their comments."""
    lines = [x.split("  #")[0].strip() for b in blocks(text, "sh") for x in b.splitlines()]
    return [x for x in lines if x and not x.startswith("#")]


def run(line):
    words = line.split()
    assert words[0] == "reconcile"
    return CliRunner().invoke(main, words[1:], catch_exceptions=False)


EVERY = [*commands(README), *commands(DEVELOPERS)]
FRESH = [c for c in EVERY if c.startswith("python3 -m venv")]
OURS = [c for c in EVERY if c.startswith("reconcile ")]
TOOLS = [c for c in EVERY if c.startswith(("pytest", "ruff"))]


def test_every_command_of_the_documents_is_run_by_a_test_here():
    assert set(EVERY) == {*FRESH, *OURS, *TOOLS}
    assert len(FRESH) == 3
    assert len(OURS) >= 3


@pytest.fixture
def beside(tmp_path, monkeypatch):
    """A folder with the data sets and the files that the documents name, the current one."""
    shutil.copytree(ROOT / "datasets", tmp_path / "datasets")
    for text in (README, DEVELOPERS):
        for block in (b for language in ("python", "yaml", "csv") for b in blocks(text, language)):
            name = FILE.match(block)
            if name:
                path = tmp_path / name[1]
                path.parent.mkdir(exist_ok=True)
                path.write_text(block[name.end() :], encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.parametrize("line", OURS)
def test_a_command(line, beside):
    if line.startswith("reconcile new-domain"):
        assert run(line).exit_code == 0
        return
    quick = " --runs 100" if "check-domain" in line else ""
    done = run(line + quick)
    assert done.exit_code == 0, done.output


def test_the_screen_of_the_readme(beside):
    shown = blocks(README, "text")[0]
    done = run("reconcile run datasets/membrane_skid")
    assert " ".join(shown.split()) in " ".join(done.stdout.split())


def test_the_case_of_the_readme(beside):
    (case,) = (b for b in blocks(README, "yaml") if b.startswith("reconcile: 1"))
    (beside / "readme").mkdir()
    (beside / "readme" / "case.yaml").write_text(case, encoding="utf-8")
    (beside / "readme" / "readings.csv").write_text("FT-1,FT-2,FT-3,FT-4\n30.1,1.08,12.1,30.3\n", encoding="utf-8")
    assert run("reconcile check readme").exit_code == 0
    assert run("reconcile run readme").exit_code == 0


def test_the_python_of_the_readme(beside):
    assert run("reconcile run datasets/membrane_skid --out folder").exit_code == 0
    names: dict = {}
    code = [b for b in blocks(README, "python") if not FILE.match(b)]
    assert len(code) >= 2
    for block in code:
        exec(compile(block, "README.md", "exec"), names)
    assert names["corrected"] is not None


def test_the_numbers_that_shared_errors_are_worth(beside):
    import reconcile

    shared = reconcile.load_case("case.yaml", plugins=["dialysate.py"])
    text = Path("case.yaml").read_text("utf-8")
    start, end = text.index("shared_errors:"), text.index("readings:")
    Path("alone.yaml").write_text(text[:start].replace("sigma: 0.5 mL/min", "sigma: 2.5 mL/min") + text[end:])
    alone = reconcile.load_case("alone.yaml", plugins=["dialysate.py"])
    assert alone.coverage.line("UF").smallest == pytest.approx(11.5, abs=0.05)
    assert shared.coverage.line("UF").smallest == pytest.approx(2.4, abs=0.05)


def test_the_table_of_commands_is_complete():
    listed = set(re.findall(r"^\| `reconcile ([a-z-]+)", README, re.M))
    assert listed <= set(main.commands)
    missing = set(main.commands) - listed
    assert not missing, f"README.md does not list {sorted(missing)}"


def test_the_table_of_checks_is_that_of_the_kit():
    listed = re.findall(r"^\| ([a-z ]+) \| ([^|]+) \|$", DEVELOPERS, re.M)
    assert [(c.name, c.words) for c in CHECKS] == [x for x in listed if x[0] != "check"]


def test_the_shell_of_every_folder_that_is_named_exists():
    for name in re.findall(r"`((?:reconcile|plugins|tests|datasets)/[\w./]*)`", DEVELOPERS):
        assert (ROOT / name).exists(), name


def test_the_layout_of_the_plan_names_real_rooms():
    for row in re.findall(r"^\| (`[^|]+) \| [^|]+ \| [^|]* \|$", DEVELOPERS, re.M):
        first, *others = re.findall(r"`([^`]+)`", row)
        parent = (ROOT / first).parent
        for name in (first, *others):
            assert (ROOT / name).exists() or (parent / name).exists(), name


@pytest.mark.slow
@pytest.mark.parametrize("line", TOOLS)
def test_a_tool(line):
    for part in line.split(" && "):
        words = part.split()
        if words[0] == "pytest":
            words += ["--collect-only"]
        done = subprocess.run(
            [sys.executable, "-m", *words], cwd=ROOT, capture_output=True, text=True, timeout=1800, check=False
        )
        # 5: no test carries the marker.
        assert done.returncode in ((0, 5) if words[0] == "pytest" else (0,)), done.stdout[-3000:] + done.stderr[-3000:]


@pytest.mark.slow
@pytest.mark.parametrize("line", FRESH)
def test_a_fresh_installation(line, tmp_path):
    """In a copy of the folder, as the reader would; packages come from the registry."""
    copy = tmp_path / "copy"
    skipped = shutil.ignore_patterns(".git", ".venv", "__pycache__", ".*_cache", ".hypothesis")
    shutil.copytree(ROOT, copy, ignore=skipped)
    environment = {k: v for k, v in os.environ.items() if not k.startswith(("PYTHON", "VIRTUAL_ENV", "PYTEST"))}
    done = subprocess.run(
        ["sh", "-ec", line], cwd=copy, env=environment, capture_output=True, text=True, timeout=5400, check=False
    )
    assert done.returncode == 0, done.stdout[-3000:] + done.stderr[-3000:]
