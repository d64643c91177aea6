"""Peak memory does not grow with the length of the log, but for a few bytes a row."""

from __future__ import annotations

from peak import peak_of
from skid_logs import SKID, skid_log

SHORT, LONG = 60_000, 360_000
BYTES_A_ROW = 100
"""The way through memory takes thousands: readings, labels, statuses, results and tables of every row."""


def peak(folder, rows):
    log, out = folder / f"log{rows}.csv", folder / f"out{rows}"
    skid_log(rows, missing=0.01).to_csv(log, index=False)
    return peak_of("run", str(folder / "case.yaml"), "--readings", str(log), "--out", str(out), "--chunk", "8192")


def test_memory_is_bounded(tmp_path):
    (tmp_path / "case.yaml").write_text(SKID.replace("LEVEL", "1.0e-9"), "utf-8")
    grown = peak(tmp_path, LONG) - peak(tmp_path, SHORT)
    assert grown < BYTES_A_ROW * (LONG - SHORT)
