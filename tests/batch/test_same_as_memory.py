"""Working in pieces gives what the way through memory gives, whatever the size of the pieces."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from skid_logs import SKID, TAGS, skid_log

from reconcile import load_case
from reconcile.adjust.batch import BLOCK
from reconcile.batch import Unsuited, run_streamed
from reconcile.corrected import load_corrected
from reconcile.export import write
from reconcile.results import word_of_evidence

DATASETS = Path(__file__).resolve().parents[2] / "datasets"


def bytes_of(folder):
    return {p.name: p.read_bytes() for p in sorted(folder.iterdir())}


def both(case, source, tmp_path, **options):
    """Result of the way through memory, and the data set written in pieces."""
    result = case.run(source, exclude=options.get("exclude"))
    run_streamed(case, source, tmp_path / "pieces", least=0, **options)
    return result, load_corrected(tmp_path / "pieces")


def check_values(memory, pieces, rtol=1e-9, atol=1e-9):
    for stem in ("adjusted", "sigmas"):
        frame = getattr(pieces, stem)
        assert tuple(frame.columns) == ("snapshot", *memory.variables)
        assert tuple(frame["snapshot"]) == memory.labels
        np.testing.assert_allclose(frame.iloc[:, 1:].to_numpy(float), getattr(memory, stem), rtol=rtol, atol=atol)
    evidence = pieces.evidence
    for column in ("objective", "limit", "p_value", "checks"):
        np.testing.assert_allclose(evidence[column], getattr(memory, column), rtol=max(rtol, 1e-7), atol=atol)
    assert evidence["decision"].tolist() == np.where(memory.suspicious, "flagged", "").tolist()
    plain = [word_of_evidence(int(c), p) for c, p in zip(memory.checks, memory.p_value, strict=True)]
    watch = [i for i, word in enumerate(plain) if word == "watch"]
    for i, word in enumerate(plain):
        if i not in watch:
            assert evidence["word"][i] == word
    # Among those to watch, a corrected test of a reading may decide; it takes time, so some have to do.
    for i in watch[:8]:
        tests = memory.snapshot(i).meter_tests
        beyond = np.nanmax(np.abs(tests.z)) > tests.limit
        assert evidence["word"][i] == ("does not agree" if beyond else "watch")


def test_a_short_log_gives_every_table(skid, tmp_path):
    case = skid()
    source = tmp_path / "log.csv"
    skid_log(60, drift=10.0).to_csv(source, index=False)
    result, pieces = both(case, source, tmp_path)
    check_values(result, pieces)
    write(result, tmp_path / "memory")
    memory = load_corrected(tmp_path / "memory")
    for stem in ("variables", "evidence", "suspects", "balances", "figures"):
        pd.testing.assert_frame_equal(getattr(pieces, stem), getattr(memory, stem), rtol=1e-6, atol=1e-9)
    for a, b in zip(memory.summary["snapshots"], pieces.summary["snapshots"], strict=True):
        assert (a["snapshot"], a["word"], a["explanation"]) == (b["snapshot"], b["word"], b["explanation"])
    for i in (0, 7, 59):
        pd.testing.assert_frame_equal(pieces.covariance(i), memory.covariance(i), rtol=1e-9)
    value, sigma = pieces.propagate("permeate.flow / feed.flow", 3)
    assert (value, sigma) == pytest.approx(memory.propagate("permeate.flow / feed.flow", 3))


def test_a_long_log_gives_the_same_numbers_and_words(skid, tmp_path):
    case = skid(level=0.001)
    source = tmp_path / "log.csv"
    skid_log(2 * BLOCK + 500, drift=3.0).to_csv(source, index=False)
    memory, pieces = both(case, source, tmp_path, chunk=BLOCK)
    check_values(memory, pieces)
    assert pieces.summary["provenance"] == dict(memory.provenance)
    assert {n.code for n in memory.notices} <= {n["code"] for n in pieces.summary["notices"]}


@pytest.fixture(scope="module")
def reference(tmp_path_factory):
    folder = tmp_path_factory.mktemp("reference")
    (folder / "case.yaml").write_text(SKID.replace("LEVEL", "0.001"), "utf-8")
    case = load_case(folder / "case.yaml")
    skid_log(4 * BLOCK + 321, drift=6.0).to_csv(folder / "log.csv", index=False)
    run_streamed(case, folder / "log.csv", folder / "out", least=0, formats=("csv", "parquet"))
    return case, folder / "log.csv", bytes_of(folder / "out")


@pytest.mark.parametrize(("jobs", "chunk"), [(1, 1), (2, BLOCK), (3, 2 * BLOCK), (2, 3 * BLOCK), (1, 10**6)])
def test_same_bytes_for_any_piece_and_any_number_of_jobs(reference, tmp_path, jobs, chunk):
    case, source, want = reference
    run_streamed(case, source, tmp_path, least=0, jobs=jobs, chunk=chunk, formats=("csv", "parquet"))
    assert bytes_of(tmp_path) == want


def test_the_parquet_tables_hold_the_same_numbers(reference, tmp_path):
    _, _, want = reference
    for name in ("adjusted", "sigmas"):
        (tmp_path / f"{name}.csv").write_bytes(want[f"{name}.csv"])
        (tmp_path / f"{name}.parquet").write_bytes(want[f"{name}.parquet"])
        a, b = pd.read_csv(tmp_path / f"{name}.csv"), pd.read_parquet(tmp_path / f"{name}.parquet")
        pd.testing.assert_frame_equal(a, b, rtol=1e-15)


def rewritten(frame, way):
    """The same log as other sources write it."""
    if way == "semicolons":
        return frame.to_csv(index=False, sep=";", decimal=",").encode()
    if way == "windows":
        return b"\xef\xbb\xbf" + frame.to_csv(index=False, lineterminator="\r\n").encode()
    if way == "units":
        text = frame.to_csv(index=False).split("\n", 1)
        return f"{text[0]}\n,{','.join(['kg/h'] * 6)}\n{text[1]}".encode()
    if way == "quoted":
        return frame.to_csv(index=False, quoting=1).encode()
    if way == "end":
        return frame.to_csv(index=False).rstrip("\n").encode()
    if way == "blank end":
        return frame.to_csv(index=False).encode() + b"\n\n"
    if way == "numbered":
        return frame.drop(columns="time").to_csv(index=False).encode()
    if way == "named":
        return (
            frame.assign(time=[f'run "{i}", again' for i in range(len(frame))])
            .rename(columns={"time": "label"})
            .to_csv(index=False)
            .encode()
        )
    if way == "zoned":
        return frame.assign(time=frame["time"].str.replace(" ", "T") + "Z").to_csv(index=False).encode()
    if way == "milliseconds":
        return frame.assign(time=frame["time"] + ".250").to_csv(index=False).encode()
    if way == "words":
        odd = frame.astype(object)
        odd.loc[BLOCK + 5, "F"] = "#N/A"
        odd.loc[BLOCK + 6, "F"] = "n/a"
        odd.loc[BLOCK + 7, "R"] = " 150.5 "
        return odd.to_csv(index=False).encode()
    raise AssertionError(way)


WAYS = [
    "semicolons", "windows", "units", "quoted", "end", "blank end", "numbered", "named", "zoned", "milliseconds", "words",
]  # fmt: skip


@pytest.mark.parametrize("way", WAYS)
def test_as_other_sources_write_it(skid, tmp_path, way):
    case = skid(level=0.001)
    source = tmp_path / "log.csv"
    source.write_bytes(rewritten(skid_log(BLOCK + 300, missing=0.01), way))
    check_values(*both(case, source, tmp_path, chunk=BLOCK))


def test_several_files_in_the_order_of_their_stamps(skid, tmp_path):
    case = skid(level=0.001)
    frame = skid_log(BLOCK + 300, missing=0.01)
    frame.iloc[1000:].to_csv(tmp_path / "a.csv", index=False)
    frame.iloc[:1000].to_csv(tmp_path / "b.csv", index=False)
    pattern = str(tmp_path / "[ab].csv")
    memory, pieces = both(case, pattern, tmp_path, chunk=BLOCK)
    check_values(memory, pieces)
    assert pieces.summary["provenance"] == dict(memory.provenance)


@pytest.mark.parametrize("row_group", [700, 10**6])
def test_parquet(skid, tmp_path, row_group):
    case = skid(level=0.001)
    frame = skid_log(BLOCK + 300, missing=0.01).assign(time=lambda f: pd.to_datetime(f["time"]))
    frame.to_parquet(tmp_path / "log.parquet", row_group_size=row_group, index=False)
    check_values(*both(case, tmp_path / "log.parquet", tmp_path, chunk=BLOCK))


def test_a_meter_left_out(skid, tmp_path):
    case = skid(level=0.001)
    source = tmp_path / "log.csv"
    skid_log(BLOCK + 10, missing=0.01).to_csv(source, index=False)
    memory, pieces = both(case, source, tmp_path, exclude={"D": "in repair"})
    check_values(memory, pieces)
    assert pieces.summary["left_out"] == {"D": "in repair"}


@pytest.mark.parametrize("at", ["adjusted", "reading"])
def test_sigmas_in_percent(skid, tmp_path, at):
    text = SKID.replace("sigma: 1.6 kg/h", "sigma: 1 % of reading").replace("{level", f"{{percent_at: {at}, level")
    case = skid(level=0.001, text=text)
    source = tmp_path / "log.csv"
    skid_log(60).to_csv(source, index=False)
    # One snapshot at a time stops within 1e-7 sigma of where the values stand still.
    check_values(*both(case, source, tmp_path), rtol=1e-7, atol=1e-7)


def test_products_are_solved_one_by_one(tmp_path):
    case = load_case(DATASETS / "flotation")
    rows = 12
    read = case.read()
    values = np.where(read.usable, read.values, np.nan)[:1]
    spread = 1.0 + 0.002 * np.random.default_rng(3).normal(size=(rows, values.shape[1]))
    frame = pd.DataFrame(values * spread, columns=list(read.columns))
    frame.insert(0, "shift", [f"shift {i}" for i in range(rows)])
    frame.to_csv(tmp_path / "log.csv", index=False)
    check_values(*both(case, tmp_path / "log.csv", tmp_path), rtol=1e-6, atol=1e-9)


def test_what_a_reading_cannot_be_is_left_out_with_its_reason(skid, tmp_path):
    case = skid(level=0.001, text=SKID.replace("sigma: 0.2 kg/h}", "sigma: 0.2 kg/h, span: 0 to 20 kg/h}"))
    source = tmp_path / "log.csv"
    frame = skid_log(BLOCK + 300, missing=0.0)
    frame.loc[[50, 51, BLOCK + 2], "B"] = 20.0
    frame.to_csv(source, index=False)
    memory, pieces = both(case, source, tmp_path, chunk=BLOCK)
    check_values(memory, pieces)
    assert pieces.summary["campaign"]["cells_without_a_number"] == {"B": {"at the upper end of the span, 20": 3}}


def test_an_empty_column_and_an_empty_row(skid, tmp_path):
    case = skid(level=0.001)
    frame = skid_log(300)
    frame["D"] = np.nan
    frame.loc[7, TAGS] = np.nan
    frame.to_csv(tmp_path / "log.csv", index=False)
    check_values(*both(case, tmp_path / "log.csv", tmp_path))


def test_the_balances_of_the_written_table_close(skid, tmp_path):
    case = skid()
    skid_log(500).to_csv(tmp_path / "log.csv", index=False)
    run_streamed(case, tmp_path / "log.csv", tmp_path / "out", least=0)
    x = load_corrected(tmp_path / "out").adjusted.set_index("snapshot")
    closed = x.notna().all(axis=1)
    off = (x["feed.flow"] + x["recycle.flow"] - x["discharge.flow"])[closed]
    assert np.abs(off).max() < 1e-9


NOT_IN_PIECES = {
    "blank": ("line 6001 is blank", lambda t: "\n".join([*t.split("\n")[:6000], "", *t.split("\n")[6000:]])),
    "line break in a cell": ("line breaks", lambda t: t.replace("2024-01-01 00:05:00", '"2024-01-01\n00:05:00"')),
    "interval": ("intervals only", lambda t: t.replace(",10.0\n", ",<10.5\n", 1)),
}


@pytest.mark.parametrize("what", sorted(NOT_IN_PIECES))
def test_what_needs_the_whole_log_is_said_and_leaves_nothing(skid, tmp_path, what):
    says, change = NOT_IN_PIECES[what]
    source = tmp_path / "log.csv"
    source.write_text(change(skid_log(3 * BLOCK, missing=0.0).to_csv(index=False)), "utf-8")
    with pytest.raises(Unsuited, match=says):
        run_streamed(skid(), source, tmp_path / "out", least=0)
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ("sort: true", "needs all of them"),
        ("zone: Europe/Berlin", "changes its clocks"),
        ("shape: long, tag_column: tag, value_column: value", "long table"),
    ],
)
def test_options_that_need_the_whole_log(skid, tmp_path, options, says):
    text = SKID + f"readings: {{file: log.csv, {options}}}\n"
    skid_log(50).to_csv(tmp_path / "log.csv", index=False)
    with pytest.raises(Unsuited, match=says):
        run_streamed(skid(text=text), None, tmp_path / "out", least=0)


def test_an_interval_far_down_is_met_only_on_the_way(skid, tmp_path):
    lines = skid_log(3 * BLOCK + 100, missing=0.0).to_csv(index=False).split("\n")
    stamp, *cells = lines[-10].split(",")
    lines[-10] = ",".join([stamp, *cells[:-1], "<10.5"])
    source = tmp_path / "log.csv"
    source.write_text("\n".join(lines), "utf-8")
    with pytest.raises(Unsuited, match="intervals only"):
        run_streamed(skid(), source, tmp_path / "out", least=0, chunk=BLOCK)
    assert not (tmp_path / "out").exists()


def test_without_the_compiled_parser_and_writer(skid, tmp_path):
    case = skid(level=0.001)
    source = tmp_path / "log.csv"
    skid_log(BLOCK + 50, missing=0.01).to_csv(source, index=False)
    with_it = run_streamed(case, source, tmp_path / "with", least=0)
    # In a process of its own: pandas decides when it is imported whether the library is there.
    program = (
        "import sys; sys.modules['pyarrow'] = None\n"
        "from reconcile import load_case\nfrom reconcile.batch import run_streamed\n"
        f"case = load_case({str(tmp_path)!r})\n"
        f"run_streamed(case, {str(source)!r}, {str(tmp_path / 'whole')!r}, least=0)\n"
        f"run_streamed(case, {str(source)!r}, {str(tmp_path / 'cut')!r}, least=0, chunk={BLOCK}, jobs=2)\n"
    )
    subprocess.run([sys.executable, "-c", program], check=True, timeout=300)
    assert bytes_of(tmp_path / "whole") == bytes_of(tmp_path / "cut")
    a, b = load_corrected(tmp_path / "with"), load_corrected(tmp_path / "whole")
    for stem in ("adjusted", "sigmas", "evidence"):
        pd.testing.assert_frame_equal(getattr(a, stem), getattr(b, stem), rtol=1e-15)
    assert with_it.summary["verdict"] == b.summary["verdict"]
