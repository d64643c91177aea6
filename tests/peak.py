"""Runs the command as a program of its own and measures its peak memory."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

# The kernel's figure for this program alone: getrusage also knows the peak of the program that started it.
CODE = """
import sys
from reconcile.cli import main
try:
    main()
finally:
    line = next(l for l in open("/proc/self/status") if l.startswith("VmHWM:"))
    print(int(line.split()[1]) * 1024, file=sys.stderr)
"""


def peak_of(*arguments: str) -> int:
    """Peak resident memory of ``reconcile`` with these arguments, in bytes."""
    if not Path("/proc/self/status").exists():
        pytest.skip("peak memory is read from /proc")
    done = subprocess.run(
        [sys.executable, "-c", CODE, *arguments],
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
    )
    return int(done.stderr.split()[-1])
