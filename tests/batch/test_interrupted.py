"""A run that is killed goes on from its last whole part and ends with the same bytes; what does not fit is refused."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
from skid_logs import SKID, skid_log

from reconcile import InputError, load_case
from reconcile.adjust.batch import BLOCK
from reconcile.batch import run_streamed
from reconcile.batch.journal import FOLDER, Journal

PARTS = 8
SEEDS = range(20)


class Stopped(Exception):
    pass


def stop_after(parts):
    """A progress function that breaks the run off."""
    seen = []

    def progress(done, _):
        seen.append(done)
        if len(seen) > parts:
            raise Stopped

    return progress


def bytes_of(folder):
    return {p.name: p.read_bytes() for p in sorted(folder.iterdir()) if p.name != FOLDER}


@pytest.fixture(scope="module")
def campaign(tmp_path_factory):
    folder = tmp_path_factory.mktemp("campaign")
    (folder / "case.yaml").write_text(SKID.replace("LEVEL", "1.0e-9"), "utf-8")
    case = load_case(folder / "case.yaml")
    skid_log(PARTS * BLOCK - 100).to_csv(folder / "log.csv", index=False)
    run_streamed(case, folder / "log.csv", folder / "out", least=0)
    return case, folder, bytes_of(folder / "out")


def command(folder, out, *more):
    code = "from reconcile.cli import main; main()"
    line = [sys.executable, "-c", code, "run", str(folder / "case.yaml"), "--readings", str(folder / "log.csv")]
    return [*line, "--out", str(out), "--chunk", str(BLOCK), *more]


def start(folder, out, *more, **options):
    return subprocess.Popen(command(folder, out, *more), stdout=subprocess.PIPE, stderr=subprocess.PIPE, **options)


def parts_noted(out):
    try:
        return (out / FOLDER / "journal.jsonl").read_bytes().count(b"\n") - 1
    except FileNotFoundError:
        return -1


@pytest.mark.parametrize("seed", SEEDS)
def test_killed_at_any_point(campaign, tmp_path, seed):
    case, folder, want = campaign
    rng = np.random.default_rng(seed)
    out = tmp_path / "out"
    # Every fourth is killed after the last part: while files are put together and moved.
    wait_for = PARTS if seed % 4 == 0 else int(rng.integers(0, PARTS))
    child = start(folder, out, "--jobs", str(1 + seed % 2))
    while parts_noted(out) < wait_for and child.poll() is None:
        time.sleep(0.0005)
    time.sleep(float(rng.uniform(0.0, 0.15 if wait_for == PARTS else 0.02)))
    child.send_signal(signal.SIGKILL)
    child.communicate()
    found = bytes_of(out)
    # Whatever stands under a final name is whole.
    assert all(want[name] == content for name, content in found.items())
    again = run_streamed(case, folder / "log.csv", out, least=0, chunk=BLOCK)
    assert bytes_of(out) == want
    assert not (out / FOLDER).exists()
    if child.returncode == -signal.SIGKILL and not found and wait_for:
        assert again.taken_up >= BLOCK * min(wait_for, PARTS - 1)


def test_parts_that_are_there_are_not_computed_again(campaign, tmp_path):
    case, folder, want = campaign
    with pytest.raises(Stopped):
        run_streamed(case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK, progress=stop_after(3))
    assert bytes_of(tmp_path) == {}
    calls = []
    done = run_streamed(
        case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK, progress=lambda d, n: calls.append((d, n))
    )
    assert done.taken_up == 3 * BLOCK
    assert calls[0] == (3 * BLOCK, PARTS * BLOCK - 100)
    assert len(calls) == 1 + PARTS - 3
    assert bytes_of(tmp_path) == want


@pytest.mark.parametrize("harm", ["gone", "changed", "cut", "journal cut"])
def test_a_part_that_was_harmed_is_computed_again(campaign, tmp_path, harm):
    case, folder, want = campaign
    with pytest.raises(Stopped):
        run_streamed(case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK, progress=stop_after(3))
    part, journal = tmp_path / FOLDER / "000001.adjusted.csv", tmp_path / FOLDER / "journal.jsonl"
    if harm == "gone":
        part.unlink()
    elif harm == "changed":
        part.write_bytes(part.read_bytes().replace(b"1", b"2", 1))
    elif harm == "cut":
        part.write_bytes(part.read_bytes()[:-10])
    else:
        journal.write_bytes(journal.read_bytes()[:-10])
    again = run_streamed(case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK)
    assert again.taken_up == 2 * BLOCK
    assert bytes_of(tmp_path) == want


CHANGES = {
    "readings": "readings",
    "chunk": f"rows of a part \\(--chunk\\) {BLOCK} instead of {2 * BLOCK}",
    "case": "another case file",
    "exclude": "meters left out",
    "formats": "another formats",
}


@pytest.mark.parametrize("what", sorted(CHANGES))
def test_parts_of_another_run_are_not_mixed_in(campaign, tmp_path, what):
    _, folder, _ = campaign
    for name in ("case.yaml", "log.csv"):
        (tmp_path / name).write_bytes((folder / name).read_bytes())
    case, log, out = load_case(tmp_path / "case.yaml"), tmp_path / "log.csv", tmp_path / "out"
    with pytest.raises(Stopped):
        run_streamed(case, log, out, least=0, chunk=BLOCK, progress=stop_after(2))
    options = {"chunk": BLOCK}
    if what == "readings":
        log.write_bytes(log.read_bytes().replace(b"50.0,", b"50.1,", 1))
    elif what == "chunk":
        options["chunk"] = 2 * BLOCK
    elif what == "case":
        (tmp_path / "case.yaml").write_text(SKID.replace("LEVEL", "1.0e-9").replace("0.5 kg/h", "0.6 kg/h"), "utf-8")
        case = load_case(tmp_path / "case.yaml")
    elif what == "exclude":
        options["exclude"] = {"D": "in repair"}
    else:
        options["formats"] = ("csv", "parquet")
    before = sorted(p.name for p in (out / FOLDER).iterdir())
    with pytest.raises(InputError, match=CHANGES[what]) as caught:
        run_streamed(case, log, out, least=0, **options)
    assert caught.value.code == "parts-of-another-run"
    assert sorted(p.name for p in (out / FOLDER).iterdir()) == before
    done = run_streamed(case, log, out, least=0, restart=True, **options)
    assert done.taken_up == 0
    assert not (out / FOLDER).exists()


def test_two_runs_at_once_are_refused(campaign, tmp_path):
    pytest.importorskip("fcntl")
    case, folder, want = campaign
    other = Journal(tmp_path, {"readings": {}})
    other.open(restart=False)
    with pytest.raises(InputError, match="another run is writing"):
        run_streamed(case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK)
    other.finish()
    run_streamed(case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK)
    assert bytes_of(tmp_path) == want


def test_files_of_an_earlier_run_are_replaced(campaign, tmp_path):
    case, folder, want = campaign
    (tmp_path / "adjusted.csv").write_text("old", "utf-8")
    (tmp_path / "mine.txt").write_text("keep", "utf-8")
    run_streamed(case, folder / "log.csv", tmp_path, least=0, chunk=BLOCK)
    assert bytes_of(tmp_path) == want | {"mine.txt": b"keep"}


# ------------------------------------------------------------------ trouble with files


def limited(size):
    import resource

    return lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))


@pytest.mark.parametrize(("size", "kept"), [(100_000, False), (600_000, True)])
def test_a_full_disk(campaign, tmp_path, size, kept):
    """No file may grow beyond a limit: first not even a part, then all parts but not the whole table."""
    case, folder, want = campaign
    out = tmp_path / "out"
    child = start(folder, out, preexec_fn=limited(size))
    _, errors = child.communicate()
    text = errors.decode()
    assert child.returncode == 2
    assert text.count("[cannot-write]") == 1
    assert "File too large" in text
    assert "Traceback" not in text
    assert bytes_of(out) == {}
    again = run_streamed(case, folder / "log.csv", out, least=0, chunk=BLOCK)
    assert again.taken_up == (PARTS * BLOCK - 100 if kept else 0)
    assert bytes_of(out) == want


@pytest.mark.parametrize(
    "way", ["a file has the folder's name", "a file has the parts' name", "a folder has a table's name"]
)
def test_something_in_the_way(campaign, tmp_path, way):
    case, folder, _ = campaign
    out = tmp_path / "out"
    if way == "a file has the folder's name":
        out.write_text("mine", "utf-8")
    elif way == "a file has the parts' name":
        out.mkdir()
        (out / FOLDER).write_text("mine", "utf-8")
    else:
        (out / "adjusted.csv").mkdir(parents=True)
    with pytest.raises(InputError) as caught:
        run_streamed(case, folder / "log.csv", out, least=0, chunk=BLOCK)
    assert caught.value.code == "cannot-write"
    assert "nothing was written" in str(caught.value)
    if out.is_dir():
        assert len(list(out.iterdir())) == 1
    else:
        assert out.read_text("utf-8") == "mine"


def test_a_folder_that_may_not_be_written(campaign, tmp_path):
    case, folder, _ = campaign
    out = tmp_path / "out"
    out.mkdir()
    out.chmod(0o500)
    try:
        if os.access(out, os.W_OK):
            pytest.skip("this user may write everywhere")
        with pytest.raises(InputError, match="nothing was written"):
            run_streamed(case, folder / "log.csv", out, least=0, chunk=BLOCK)
    finally:
        out.chmod(0o700)


def at_part(number, act):
    """A progress function that does something once, after so many parts."""
    seen = []

    def progress(done, _):
        seen.append(done)
        if len(seen) == number + 1:
            act()

    return progress


def test_a_source_that_vanishes(campaign, tmp_path):
    case, folder, want = campaign
    log = tmp_path / "log.csv"
    log.write_bytes((folder / "log.csv").read_bytes())
    out = tmp_path / "out"
    with pytest.raises(InputError) as caught:
        run_streamed(case, log, out, least=0, chunk=BLOCK, progress=at_part(2, log.unlink))
    assert caught.value.code == "source-vanished"
    assert "log.csv" in str(caught.value)
    assert bytes_of(out) == {}
    log.write_bytes((folder / "log.csv").read_bytes())
    again = run_streamed(case, log, out, least=0, chunk=BLOCK)
    assert again.taken_up > 0
    assert bytes_of(out) == want


def test_one_of_several_sources_vanishes(campaign, tmp_path):
    case, _, _ = campaign
    frame = skid_log(4 * BLOCK)
    frame.iloc[: 2 * BLOCK].to_csv(tmp_path / "log1.csv", index=False)
    frame.iloc[2 * BLOCK :].to_csv(tmp_path / "log2.csv", index=False)
    gone = at_part(1, (tmp_path / "log2.csv").unlink)
    with pytest.raises(InputError, match=r"log2\.csv.*cannot be read any more"):
        run_streamed(case, str(tmp_path / "log?.csv"), tmp_path / "out", least=0, chunk=BLOCK, progress=gone)
    assert bytes_of(tmp_path / "out") == {}


def test_a_source_that_is_still_being_written(campaign, tmp_path):
    case, folder, _ = campaign
    log = tmp_path / "log.csv"
    log.write_bytes((folder / "log.csv").read_bytes())

    def go_on():
        with log.open("ab") as file:
            file.write(b"2025-01-01 00:00:00,50,150,200,40,160,10\n")

    with pytest.raises(InputError, match="changed while it was being read"):
        run_streamed(case, log, tmp_path / "out", least=0, chunk=BLOCK, progress=at_part(2, go_on))
    assert bytes_of(tmp_path / "out") == {}


def test_all_mistakes_of_a_log_at_once_with_their_lines(campaign, tmp_path):
    case, folder, _ = campaign
    lines = (folder / "log.csv").read_text("utf-8").split("\n")
    for line, text in ((6001, "abc"), (9001, "12.5.3"), (12_001, "50,9")):
        cells = lines[line - 1].split(",")
        cells[1] = text
        lines[line - 1] = ",".join(cells)
    log = tmp_path / "log.csv"
    log.write_text("\n".join(lines), "utf-8")
    with pytest.raises(InputError) as caught:
        run_streamed(case, log, tmp_path / "out", least=0, chunk=BLOCK)
    places = [(p.where.line, p.where.row) for p in caught.value.problems]
    assert places == [(6001, 6000), (9001, 9000), (12_001, 12_000)]
    assert "abc" in caught.value.problems[0].message
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(("swap", "code"), [((6000, 6001), "time-order"), ((3 * BLOCK, 3 * BLOCK + 1), "time-order")])
def test_stamps_that_do_not_rise(campaign, tmp_path, swap, code):
    case, folder, _ = campaign
    lines = (folder / "log.csv").read_text("utf-8").split("\n")
    a, b = swap
    lines[a], lines[b] = lines[b], lines[a]
    log = tmp_path / "log.csv"
    log.write_text("\n".join(lines), "utf-8")
    with pytest.raises(InputError) as caught:
        run_streamed(case, log, tmp_path / "out", least=0, chunk=BLOCK)
    assert caught.value.code == code
    assert not (tmp_path / "out").exists()


def test_a_stamp_that_comes_again_in_the_next_part(campaign, tmp_path):
    case, folder, _ = campaign
    lines = (folder / "log.csv").read_text("utf-8").split("\n")
    stamp = lines[3 * BLOCK].split(",")[0]
    lines[3 * BLOCK + 1] = stamp + lines[3 * BLOCK + 1][len(stamp) :]
    log = tmp_path / "log.csv"
    log.write_text("\n".join(lines), "utf-8")
    with pytest.raises(InputError, match=stamp) as caught:
        run_streamed(case, log, tmp_path / "out", least=0, chunk=BLOCK)
    assert caught.value.code == "duplicate-stamp"
