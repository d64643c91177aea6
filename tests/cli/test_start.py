"""What `reconcile --help` loads: nothing heavy, so that it starts at once."""

from __future__ import annotations

import subprocess
import sys


def loaded_by(*words):
    code = f"import sys; sys.argv = {['reconcile', *words]!r}\nfrom reconcile.cli import main\ntry:\n    main()\nexcept SystemExit:\n    pass\nsys.stderr.write(' '.join(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return set(done.stderr.split())


def test_help_loads_no_numeric_library():
    modules = loaded_by("--help")
    assert "click" in modules
    for heavy in ("numpy", "scipy", "pandas", "pydantic", "pint", "yaml"):
        assert heavy not in modules


def test_a_run_never_loads_the_slow_parts_of_scipy(datasets):
    modules = loaded_by("run", str(datasets / "membrane_skid"))
    assert "numpy" in modules
    assert "scipy.stats" not in modules
    assert "scipy.optimize" not in modules
