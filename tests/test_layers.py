"""Who may look at whom: the rooms import in one direction only."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parent.parent / "reconcile"
PLUGINS = PACKAGE.parent / "plugins"


def imports_of(path: Path, root: Path = PACKAGE) -> set[str]:
    """Absolute names of all modules that a file imports, at its top or inside functions."""
    parts = ["reconcile", *path.relative_to(root).with_suffix("").parts] if root == PACKAGE else []
    found = set()
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            found |= {a.name for a in node.names}
        elif isinstance(node, ast.ImportFrom):
            base = parts[: -node.level] if node.level else []
            name = ".".join([*base, *([node.module] if node.module else [])])
            found.add(name)
            found |= {f"{name}.{a.name}" for a in node.names}
    return found


def files(*rooms: str) -> list[Path]:
    out = []
    for room in rooms:
        place = PACKAGE / room
        out += [place] if place.is_file() else sorted(place.rglob("*.py"))
    return out


def allowed(name: str, *prefixes: str) -> bool:
    return any(name == p or name.startswith(p + ".") for p in prefixes)


@pytest.mark.parametrize("path", files("adjust", "diagnose"), ids=lambda p: p.name)
def test_kernels_know_only_arrays(path):
    for name in imports_of(path):
        if name.startswith("reconcile"):
            assert allowed(
                name,
                "reconcile.adjust",
                "reconcile.diagnose",
                "reconcile.system",
                "reconcile.expression",
                "reconcile.errors",
            ), f"{path.name} imports {name}"
        assert not allowed(name, "pandas", "yaml", "pint", "pydantic", "click", "scipy.stats", "scipy.optimize")


@pytest.mark.parametrize("path", files("network.py", "expression.py", "system.py"), ids=lambda p: p.name)
def test_the_foundation_imports_nothing_else(path):
    for name in imports_of(path):
        if name.startswith("reconcile"):
            assert allowed(name, "reconcile.expression", "reconcile.errors")  # errors import nothing of the project


@pytest.mark.parametrize("path", sorted(PACKAGE.rglob("*.py")), ids=lambda p: str(p.relative_to(PACKAGE)))
def test_nobody_imports_the_command_line_or_a_plugin(path):
    for name in imports_of(path):
        assert not allowed(name, "reconcile.cli")
        assert not name.startswith("reconcile_")


@pytest.mark.parametrize("path", files("report"), ids=lambda p: p.name)
def test_reports_are_the_end_of_the_way(path):
    for name in imports_of(path):
        assert not allowed(name, "reconcile.run", "reconcile.readings", "reconcile.domains") or _only_for_types(
            path, name
        )


def _only_for_types(path: Path, name: str) -> bool:
    text = path.read_text("utf-8")
    guarded = text.split("if TYPE_CHECKING:", 1)[1].split("\n__all__", 1)[0] if "if TYPE_CHECKING:" in text else ""
    return name.rsplit(".", 1)[-1] in guarded


@pytest.mark.parametrize("path", sorted(PLUGINS.rglob("*.py")), ids=lambda p: str(p.relative_to(PLUGINS)))
def test_domains_use_public_names_only(path):
    public = {"reconcile", "reconcile.testing", "reconcile.units"}
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.ImportFrom) and not node.level and (node.module or "").split(".")[0] == "reconcile":
            assert node.module in public, f"{path} imports from {node.module}"
        elif isinstance(node, ast.Import):
            assert all(a.name.split(".")[0] != "reconcile" or a.name in public for a in node.names)
