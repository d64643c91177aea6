"""What the command line cannot do for tied windows is refused before anything is computed or written."""

import pytest
from click.testing import CliRunner
from tank_trains import TRAIN

from reconcile.cli import main


@pytest.mark.parametrize(
    ("option", "code"),
    [(["--suspects", "exclude"], "no-decisions"), (["--suspects", "compensate"], "no-decisions")],
)
def test_options_that_do_not_fit(tmp_path, option, code):
    (tmp_path / "case.yaml").write_text(TRAIN, "utf-8")
    out = tmp_path / "out"
    ran = CliRunner().invoke(main, ["run", str(tmp_path), "--out", str(out), *option])
    assert ran.exit_code == 2
    assert f"[{code}]" in ran.stderr
    assert not out.exists()
