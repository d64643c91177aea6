"""The page of windows that are tied by inventories: what the terminal says, every value, and figures of it."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from itertools import pairwise

import numpy as np
import pytest
from pages import Page, rows_of
from plants import TANKS, tanks

import reconcile
from reconcile.report.figures.windows import inventories, readings_over_windows
from reconcile.report.page import MOST_SNAPSHOTS, figures_of, render_page, write_figures, write_page
from reconcile.report.page_trajectory import MOST_CELLS
from reconcile.report.trajectory import verdict_of_trajectory

SVG = "{http://www.w3.org/2000/svg}"


def follow(folder, frame, *changes):
    """Run the two tanks with these readings; changes are made in the text of the case."""
    text = TANKS
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    (folder / "case.yaml").write_text(text, "utf-8")
    return reconcile.load_case(folder / "case.yaml").run_trajectory(frame)


@pytest.fixture(scope="module")
def sound(tmp_path_factory):
    return follow(tmp_path_factory.mktemp("sound"), tanks(24))


@pytest.fixture(scope="module")
def spiked(tmp_path_factory):
    frame = tanks(24)
    frame.loc[frame.index[9], "LH"] += 14
    frame.loc[frame.index[4], "FU"] = np.nan
    return follow(tmp_path_factory.mktemp("spiked"), frame)


def test_verdict_first_then_sections_in_the_order_of_a_reader(sound):
    text = render_page(sound)
    page = Page(text)
    assert [t for level, t in page.headings if level == 2] == [
        "Inventories", "Readings", "Explanations", "All windows", "What cannot be known", "Assumptions",
        "Appendix for auditors",
    ]  # fmt: skip
    assert all(b <= a + 1 for a, b in pairwise(level for level, _ in page.headings))
    assert page.said.index(verdict_of_trajectory(sound)) < page.said.index("What nodes hold")
    assert len(page.ids) == len(set(page.ids))
    assert page.scripts == 1
    assert text == render_page(sound)
    assert not re.findall(r"(?:src|href)=\"(?!#|data:,)[^\"]*\"|url\((?!#)[^)]*\)|@import|https?://", text)


def test_every_adjusted_value_stands_in_the_table_with_its_sigma(spiked):
    header, *rows = rows_of(render_page(spiked), "windows-table")
    assert [row[0] for row in rows] == list(spiked.labels)
    for j, (name, unit) in enumerate(zip(spiked.variables, spiked.units, strict=True)):
        k = header.index(f"{name}, {unit}")
        assert header[k + 1] == "±"
        for t, row in enumerate(rows):
            sigma = spiked.sigmas[t, j]
            assert float(row[k]) == pytest.approx(spiked.adjusted[t, j], abs=0.051 * sigma)
            assert float(row[k + 1]) == pytest.approx(sigma, rel=0.051)
    assert sum(float(row[2]) for row in rows) == pytest.approx(spiked.objective, abs=0.005 * len(rows))
    assert sum(int(row[3]) for row in rows) == spiked.checks


def test_inventories_are_drawn_where_their_numbers_say(sound):
    (figure,) = inventories(sound)
    frame = tanks(24)
    for name, column in (("day.inventory", "LD"), ("header.inventory", "LH")):
        mine = [r for r in figure.rows if r[0] == name]
        value, sigma = sound.inventory(name)
        assert [float(r[3]) for r in mine] == pytest.approx(frame[column].tolist(), abs=0.051 * sigma.max())
        assert [float(r[4]) for r in mine] == pytest.approx(value.tolist(), abs=0.051 * sigma.max())
        assert [float(r[5]) for r in mine] == pytest.approx(sigma.tolist(), rel=0.051)
    dots = list(ET.fromstring(figure.to_svg()).iter(SVG + "circle"))
    # A dot a reading, and one in the key.
    assert len(dots) == 2 * 24 + 1
    y = [float(d.get("cy")) for d in dots[1:25]]
    assert np.corrcoef(y, frame["LD"])[0, 1] < -0.9999


def test_a_single_reading_that_stands_out_is_hatched_in_its_own_panel(spiked):
    (figure,) = inventories(spiked)
    flagged = [(r[0], r[1]) for r in figure.rows if r[-1] == "S"]
    assert ("header.inventory", spiked.labels[9]) in flagged
    assert not any(name == "day.inventory" for name, _ in flagged)
    page = render_page(spiked)
    meters = {row[0]: row for row in rows_of(page, "meters-table")}
    assert meters["LH"][9].endswith("suspect")
    assert meters["LH"][10] == spiked.labels[9]
    assert meters["FU"][3] == "23"
    assert int(meters["LH"][8]) == int((np.abs(spiked.z[:, spiked.model.meters[4]]) > spiked.z_limit).sum()) >= 1
    told = Page(page).said
    assert "LH reads high by 1" in told
    assert f"at {spiked.labels[9]} alone" in told
    assert ["FU", "no value", "1"] in rows_of(page, "unused-table")


def test_a_lasting_bias_is_explained_as_in_the_terminal(tmp_path):
    frame = tanks(48)
    frame["FT"] += 5
    found = follow(tmp_path, frame)
    page = render_page(found)
    assert found.word == "does not agree"
    printed = " ".join(found.summary().split())
    told = re.search(r'<ol class="told">.*?</ol>', page, re.DOTALL).group(0)
    lines = [re.sub("<[^>]*>", "", p) for p in re.findall(r"<p[^>]*>(.*?)</p>", told, re.DOTALL)]
    assert any(line.startswith("FT reads high by") and "throughout" in line for line in lines)
    assert all(" ".join(line.split()) in printed for line in lines)
    assert rows_of(page, "suspects")[1][0] == "FT"


def test_what_agrees_needs_no_explanation(sound):
    assert sound.word == "agrees"
    said = Page(render_page(sound)).said
    assert "None is needed: the readings agree within their sigmas." in said
    assert "Agrees" in said
    assert all(row[9].endswith("sound so far") for row in rows_of(render_page(sound), "meters-table")[1:])


def test_what_is_taken_as_constant_is_told(sound, tmp_path):
    assert "No errors are shared" in render_page(sound)
    assert "Errors are taken as independent from window to window" in Page(render_page(sound)).said
    found = follow(tmp_path, tanks(12), ("step: 15 min", "step: 15 min\n  constant_errors: {FM: 1 kg/h}"))
    page = render_page(found)
    assert "No errors are shared" not in page
    assert "Errors are taken as independent from window to window" not in Page(page).said
    row = rows_of(page, "shared-table")[1]
    assert (row[1], row[3]) == ("FM", "the same in all windows")


def test_what_cannot_be_known_is_told(tmp_path):
    frame = tanks(12).drop(columns=["FT", "LD"])
    text = (("  FT: {reads: transfer.flow, unit: kg/h, sigma: 1.5 kg/h}\n", ""),)
    text += (("  LD: {reads: day.inventory, unit: kg, sigma: 1 kg}\n", ""),)
    found = follow(tmp_path, frame, *text)
    page = render_page(found)
    assert "Cannot be calculated in any window: day.inventory" in Page(page).said
    assert rows_of(page, "inventories-table")[1][:5] == ["day.inventory", "nothing", "kg", "-", "-"]
    (figure,) = inventories(found)
    assert not any(r[0] == "day.inventory" for r in figure.rows)


def test_without_any_check_the_page_cannot_tell(tmp_path):
    lines = [line for line in TANKS.splitlines(True) if re.match(r"  (FU|LD|LH):", line)]
    found = follow(tmp_path, tanks(6)[["FM", "FT"]], *((line, "") for line in lines))
    page = Page(render_page(found))
    assert found.checks == 0
    assert "Cannot tell" in page.said
    assert "There is no check in any window." in page.said
    assert "Not checked by anything in any window: FM, FT." in page.said


def test_inventories_read_at_the_end_are_told_so(tmp_path):
    found = follow(tmp_path, tanks(12), ("read_at: start", "read_at: end"))
    said = Page(render_page(found)).said
    assert "What nodes hold at the end of a window" in said
    assert "Before the first window: day.inventory" in said


def test_a_single_window_has_a_page_without_courses(tmp_path):
    found = follow(tmp_path, tanks(1))
    assert figures_of(found) == {}
    assert len(rows_of(render_page(found), "windows-table")) == 2


def test_labels_are_escaped(tmp_path):
    found = follow(tmp_path, tanks(6), ("title: Day tank and header tank (invented)", "title: <b>Tanks & co</b>"))
    text = render_page(found)
    assert "<b>" not in text
    assert "&lt;b&gt;Tanks &amp; co&lt;/b&gt;" in text


def test_figures_are_written_as_files(sound, tmp_path):
    written = write_figures(sound, tmp_path, "svg")
    assert [p.name for p in written] == ["inventories.svg", "readings.svg", "derived.svg", "evidence.svg"]
    for path in written:
        assert ET.parse(path).getroot().tag == SVG + "svg"
    shown = {r[0] for f in readings_over_windows(sound) for r in f.rows}
    assert shown == {"FM", "FT", "FU"}


def test_derived_values_follow_from_the_adjusted_ones(sound):
    figure = figures_of(sound)["derived"]
    use, make = (sound.adjusted[:, sound.variables.index(n)] for n in ("use.flow", "make.flow"))
    assert [float(r[4]) for r in figure.rows] == pytest.approx((use / make).tolist(), abs=0.006)


def test_long_sequences_stay_small_and_say_what_is_missing(tmp_path):
    found = follow(tmp_path, tanks(2500))
    path = write_page(found, tmp_path / "report.html")
    assert path.stat().st_size < 5_000_000
    text = path.read_text(encoding="utf-8")
    header, *rows = rows_of(text, "windows-table")
    assert len(rows) == MOST_CELLS // len(header) < 2500
    assert f"{2500 - len(rows)} windows more; adjusted.csv" in text
    assert f"Table of {len(rows)} windows" in text


def test_very_long_sequences_are_refused(sound, tmp_path):
    from dataclasses import replace

    long = replace(sound, labels=tuple(str(i) for i in range(MOST_SNAPSHOTS + 1)))
    with pytest.raises(reconcile.InputError, match="windows are too many"):
        write_page(long, tmp_path / "report.html")
    assert not list(tmp_path.glob("*.html"))
