"""Writes a small distribution that brings a new domain: it installs, runs its example and passes its tests."""

from __future__ import annotations

import keyword
import re
import shutil
import tempfile
from importlib.resources import files
from pathlib import Path

from .domains import Plugins
from .errors import InputError, Location, Problem

__all__ = ["new_domain"]

LAYOUT = {
    "pyproject.toml": "pyproject.toml",
    "README.md": "README.md",
    "reconcile_@name@/__init__.py": "init.py",
    "reconcile_@name@/domain.py": "domain.py",
    "example/case.yaml": "case.yaml",
    "example/readings.csv": "readings.csv",
    "tests/test_@name@.py": "test.py",
    "tests/trials/two_cells.yaml": "trial.yaml",
}
"""Files of the distribution, and the template of each."""


def new_domain(name: str, into: Path, plugins: Plugins, *, author: str = "A. Author") -> Path:
    """Write the distribution ``reconcile-NAME`` into a new folder.

    Parameters
    ----------
    name : str
        Of the domain: lower-case letters, digits and underscores, a letter first.
    into : path
        Folder in which the new folder ``reconcile-NAME`` appears, whole or not at all.
    plugins : Plugins
        The installed ones, whose names are taken.
    author : str

    Returns
    -------
    Path
        The new folder.

    Raises
    ------
    InputError
        If the name cannot be used, or the folder exists.
    """
    _check_name(name, plugins)
    if not author.strip() or any(c in author for c in '"\\\n'):
        raise InputError(
            Problem("author-unusable", f"author {author!r} cannot stand in pyproject.toml", "write a plain name")
        )
    folder = into / f"reconcile-{name.replace('_', '-')}"
    if folder.exists():
        raise InputError(
            Problem(
                "folder-exists",
                f"{folder} is there already, and nothing in it was touched",
                "choose another name, or another folder with --into",
                Location(tag=name),
            )
        )
    if not into.is_dir():
        raise InputError(
            Problem("folder-missing", f"there is no folder {into}", "make it first, or name another with --into")
        )
    words = {
        "@name@": name,
        "@dashed@": name.replace("_", "-"),
        "@Class@": "".join(part.capitalize() for part in name.split("_")),
        "@author@": author.strip(),
    }
    templates = files("reconcile") / "templates" / "new_domain"
    try:
        made = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=into))
    except OSError as error:
        raise InputError(
            Problem(
                "folder-not-writable", f"{into} cannot be written to ({error.strerror})", "name another with --into"
            )
        ) from None
    try:
        for target, template in LAYOUT.items():
            path = made / _filled(target, words)
            path.parent.mkdir(parents=True, exist_ok=True)
            text = (templates / f"{template}.txt").read_text(encoding="utf-8")
            path.write_text(_filled(text, words), encoding="utf-8", newline="\n")
        made.chmod(0o755)
        made.rename(folder)
    finally:
        shutil.rmtree(made, ignore_errors=True)
    return folder


def _filled(text: str, words: dict[str, str]) -> str:
    for mark, word in words.items():
        text = text.replace(mark, word)
    return text


def _check_name(name: str, plugins: Plugins) -> None:
    if not re.fullmatch(r"[a-z][a-z0-9_]*", name) or keyword.iskeyword(name):
        near = re.sub(r"[^a-z0-9]+", "_", name.lower()).strip("_0123456789")
        usable = near and not keyword.iskeyword(near)
        raise InputError(
            Problem(
                "name-unusable",
                f"{name!r} cannot name a domain: lower-case letters, digits and underscores, a letter first, "
                "and no word of Python",
                f"try {near!r}" if usable else "try e.g. 'dialysate'",
            )
        )
    if name in plugins.domains:
        taken = plugins.domains[name]
        raise InputError(
            Problem(
                "name-taken",
                f"domain {name!r} is installed already ({taken.distribution or taken.plugin})",
                "choose another name; equal names would collide",
            )
        )
