"""The worked domain of DEVELOPERS.md, as files: what stands there is what is tested."""

from __future__ import annotations

import re
import sys
import types
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
BLOCK = re.compile(r"^```(?:python|yaml|csv)\n# (\S+)\n(.*?)^```$", re.M | re.S)


def files(document: str = "DEVELOPERS.md") -> dict[str, str]:
    """Blocks of a document whose first line names a file."""
    return dict(BLOCK.findall((ROOT / document).read_text("utf-8")))


def module(source: str, name: str = "dialysate") -> types.ModuleType:
    """Import a domain from its source; functions of it must be found by name, or nothing could be pickled."""
    made = types.ModuleType(name)
    sys.modules[name] = made
    exec(compile(source, f"{name}.py", "exec"), made.__dict__)
    return made
