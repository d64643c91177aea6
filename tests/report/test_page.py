"""The page as text: order, escaping, one file, the same bytes, a bounded size."""

from __future__ import annotations

import re
from itertools import pairwise

import pytest
from click.testing import CliRunner
from pages import Page, rows_of
from plants import plant

import reconcile
from reconcile.cli import main
from reconcile.report.by_hand import explain_node
from reconcile.report.log_parts import log_parts
from reconcile.report.page import MOST_SNAPSHOTS, render_page, write_page
from reconcile.report.words import verdict_line


@pytest.fixture(scope="module")
def skid_page():
    from pathlib import Path

    case = reconcile.load_case(Path(__file__).resolve().parents[2] / "datasets" / "membrane_skid")
    return render_page(case.run(), case=case)


def test_sections_stand_in_the_order_of_a_reader(skid_page):
    page = Page(skid_page)
    assert [t for level, t in page.headings if level == 2] == [
        "Balances", "Readings", "Explanations", "What cannot be known", "Assumptions", "Appendix for auditors",
    ]  # fmt: skip
    levels = [level for level, _ in page.headings]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(b <= a + 1 for a, b in pairwise(levels))


def test_verdict_comes_first_and_is_that_of_the_terminal(skid_page, datasets):
    verdict = verdict_line(reconcile.load_case(datasets / "membrane_skid").run())
    said = Page(skid_page).said
    assert verdict in said
    assert said.index(verdict) < said.index("Balances before and after")


def test_one_file_without_any_address(skid_page):
    assert Page(skid_page).scripts == 1
    outside = re.findall(r"(?:src|href)=\"(?!#|data:,)[^\"]*\"|url\((?!#)[^)]*\)|@import|https?://", skid_page)
    assert outside == []


def test_ids_are_unique_and_references_lead_somewhere(datasets):
    for name in ("membrane_skid", "isolated_kidney"):
        case = reconcile.load_case(datasets / name)
        page = Page(render_page(case.run(), case=case))
        assert len(page.ids) == len(set(page.ids))
        wanted = [f["href"][1:] for t, f in page.tags if t == "a"]
        wanted += [i for _, f in page.tags for k in ("aria-labelledby", "for") if f.get(k) for i in f[k].split()]
        assert set(wanted) <= set(page.ids)


def test_every_table_has_a_caption_and_header_cells(skid_page):
    tables = re.findall(r"<table.*?</table>", skid_page, re.DOTALL)
    assert len(tables) >= 8
    for t in tables:
        assert re.search(r"<caption[^>]*>[^<]+", t)
        assert re.search(r'<th scope="col"', t)
        assert len(re.findall(r"<tr", t)) - 1 == len(re.findall(r'<th scope="row"', t))


def test_a_node_worked_by_hand_is_what_the_command_prints(skid_page, datasets):
    text = explain_node(reconcile.load_case(datasets / "membrane_skid").run(), "splitter")
    assert text.strip() in Page(skid_page).said


def test_the_same_case_gives_the_same_bytes(skid_page, datasets):
    case = reconcile.load_case(datasets / "membrane_skid")
    assert render_page(case.run(), case=case) == skid_page


EVIL = "<script>alert(1)</script>"


def test_whatever_a_user_writes_stays_text(write_case):
    path = write_case(
        f"reconcile: 1\ntitle: '{EVIL} & \"pot\"'\ndomains: {{fluid: {{unit: kg/h}}}}\n"
        "streams: {in: outside -> pot, out: pot -> outside}\n"
        f"meters:\n  '{EVIL}': {{reads: in.flow, unit: kg/h, sigma: 1 kg/h}}\n"
        "  '\"><img src=x onerror=alert(2)>': {reads: out.flow, unit: kg/h, sigma: 1 kg/h}\n"
        "readings: {file: readings.csv, label_column: window}\n",
        f'window,{EVIL},"""><img src=x onerror=alert(2)>"\n{EVIL},10,14\n</style><b>,10,10.1\n',
    )
    case = reconcile.load_case(path)
    for result in (case.run(), case.run(exclude={EVIL: "</pre><script>alert(3)</script>"})):
        page = Page(render_page(result, case=case))
        assert page.scripts == 1
        assert not [t for t, _ in page.tags if t in ("img", "b", "iframe")]
        assert not [k for _, f in page.tags for k in f if k.startswith("on")]
        assert EVIL in page.said
    assert "alert(3)" in page.said


class Talker:
    """A plugin that adds a section."""

    @staticmethod
    @reconcile.hookimpl
    def reconcile_sections(result):
        return [reconcile.Section("Pump <hours>", f"First {EVIL}\n\nSecond of {result.size}")]


def test_sections_of_plugins_are_there_and_escaped(datasets):
    case = reconcile.load_case(datasets / "membrane_skid", modules=[Talker])
    page = Page(render_page(case.run(), case=case))
    assert [2, "Pump <hours>"] in page.headings
    assert f"First {EVIL}" in page.said
    assert "Second of 1" in page.said
    assert page.scripts == 1


def test_pages_of_every_kind_of_case(datasets):
    for name in ("crystalliser", "cooling_water", "stream_water", "dialysis", "membrane_log"):
        case = reconcile.load_case(datasets / name)
        result = case.run()
        page = Page(render_page(result, case=case))
        assert verdict_line(result) in page.said
        assert len(page.ids) == len(set(page.ids))
        for caution in result.cautions:
            assert caution in page.said


def test_what_became_of_the_log_is_told(datasets):
    case = reconcile.load_case(datasets / "membrane_log")
    result = case.run()
    page = Page(render_page(result, case=case))
    assert [2, "From the log to the snapshots"] in page.headings
    for i, error in result.table.failed.items():
        assert error.message in page.said
        assert f"snapshot-{i + 1}" not in page.ids


@pytest.mark.parametrize("name", ["membrane_log", "batch_tank", "flotation_test"])
def test_the_page_tells_of_the_log_what_the_terminal_tells(datasets, name):
    case = reconcile.load_case(datasets / name)
    result = case.run()
    text = render_page(result, case=case)
    parts = list(log_parts(result))
    assert parts
    printed = result.summary()
    for part in parts:
        assert f"{part.title.upper()}{part.of}" in printed
        assert rows_of(text, f"log-{part.name}") == [list(part.header), *(list(row) for row in part.rows)]
        assert all(note in Page(text).said for note in part.notes)
    decided = rows_of(text, "decisions-table")
    assert [(row[0], row[-1]) for row in decided[1:]] == [(e.rule, e.words) for e in result.prepared.log]


def test_windows_left_out_say_why_wherever_they_stand(datasets):
    result = reconcile.load_case(datasets / "membrane_log").run()
    text = render_page(result)
    told = {row[0]: row[1:] for row in rows_of(text, "failed-table")[1:]}
    listed = {row[0]: row[-2:] for row in rows_of(text, "snapshots-table")[1:]}
    assert list(told) == ["6", "7"]
    for label, left in zip(("6", "7"), (result.prepared.left_out[i] for i in (5, 6)), strict=True):
        assert told[label][0] == f"left out: {left.code}"
        assert listed[label] == [f"– left out: {left.code}", told[label][1]]
    assert "not solved" not in text


def test_readings_that_nobody_read_are_marked(datasets):
    text = render_page(reconcile.load_case(datasets / "batch_tank").run())
    words = {row[0]: row[-1] for row in rows_of(text, "readings-table")[1:]}
    assert words["out_total"].endswith(", estimated")
    assert "estimated" not in words["feed_total"]
    assert words["level"].endswith("sound so far")


def test_a_case_without_a_log_has_no_section_on_it(skid_page):
    assert "From the log" not in skid_page


def test_suspects_that_were_decided_about_are_listed(datasets):
    result = reconcile.load_case(datasets / "membrane_log").run(suspects="exclude")
    assert result.decisions
    told = rows_of(render_page(result), "decided-table")[1:]
    assert told == [[result.labels[i], d.words] for i, d in sorted(result.decisions.items())]


def test_nothing_to_check_is_said(write_case):
    path = write_case(
        "reconcile: 1\ntitle: A lone meter (invented)\ndomains: {fluid: {unit: kg/h}}\n"
        "streams: {in: outside -> pot, out: pot -> outside}\n"
        "meters:\n  A: {reads: in.flow, unit: kg/h, sigma: 1 kg/h}\nreadings: readings.csv\n",
        "A\n10\n",
    )
    case = reconcile.load_case(path)
    said = Page(render_page(case.run(), case=case)).said
    assert "Cannot tell" in said
    assert "Nothing in this network would notice an error of A." in said
    assert "Nothing can be said: there is no check." in said


def test_snapshots_without_an_answer_are_listed(datasets):
    case = reconcile.load_case(datasets / "membrane_skid")
    result = case.run({t: [v, v + 1] for t, v in zip("FRDPTB", (50, 150, 200, 40, 160, 10), strict=True)})
    from dataclasses import replace

    failed = replace(result, table=replace(result.table, failed={1: reconcile.SolveError("did not settle", code="x")}))
    page = Page(render_page(failed, case=case))
    assert "did not settle" in page.said
    assert "snapshot-2" not in page.ids


@pytest.mark.parametrize(("rows", "columns", "snapshots"), [(1, 4, 200), (2, 6, 2000)])
def test_campaigns_stay_below_five_megabytes(tmp_path, rows, columns, snapshots):
    case = reconcile.load_case(plant(tmp_path, rows, columns, snapshots=snapshots))
    path = write_page(case.run(), tmp_path / "report.html", case=case)
    assert 500_000 < path.stat().st_size < 5_000_000
    page = Page(path.read_text(encoding="utf-8"))
    assert len([1 for t, f in page.tags if t == "details" and f.get("class") == "snapshot"]) >= 40
    body = re.search(r'<table[^>]*id="snapshots-table".*?</table>', path.read_text(encoding="utf-8"), re.DOTALL).group(
        0
    )
    assert body.count("<tr") == snapshots + 1


def test_very_long_results_are_refused(datasets, tmp_path):
    case = reconcile.load_case(datasets / "membrane_skid")
    n = MOST_SNAPSHOTS + 1
    result = case.run({t: [v] * n for t, v in zip("FRDPTB", (50, 150, 200, 40, 160, 10), strict=True)})
    with pytest.raises(reconcile.InputError, match="report-too-long"):
        write_page(result, tmp_path / "report.html")
    assert list(tmp_path.iterdir()) == []


def test_command_writes_beside_the_case_or_into_the_folder(datasets, tmp_path):
    import shutil

    shutil.copytree(datasets / "membrane_skid", tmp_path / "skid")
    run = CliRunner().invoke(main, ["run", str(tmp_path / "skid"), "--report"])
    assert run.exit_code == 0
    assert (tmp_path / "skid" / "report.html").read_text(encoding="utf-8").startswith("<!DOCTYPE html>")
    run = CliRunner().invoke(
        main, ["run", str(tmp_path / "skid"), "--out", str(tmp_path / "out"), "--report", "--pictures", "svg"]
    )
    assert run.exit_code == 0
    assert (tmp_path / "out" / "report.html").is_file()
    assert {"network.svg", "adjustments.svg", "balances.svg"} <= {
        p.name for p in (tmp_path / "out" / "pictures").iterdir()
    }


def test_json_stays_json_beside_a_report(datasets, tmp_path):
    import json

    run = CliRunner().invoke(
        main, ["run", str(datasets / "membrane_skid"), "--json", "--out", str(tmp_path), "--report"]
    )
    assert json.loads(run.stdout)["snapshots"][0]["word"] == "does not agree"


def test_a_place_that_cannot_be_written_is_told(datasets, tmp_path):
    (tmp_path / "file").write_text("")
    result = reconcile.load_case(datasets / "membrane_skid").run()
    with pytest.raises(reconcile.InputError, match="cannot-write"):
        write_page(result, tmp_path / "file" / "report.html")


def test_an_unfinished_page_never_takes_the_place_of_a_whole_one(datasets, tmp_path, monkeypatch):
    result = reconcile.load_case(datasets / "membrane_skid").run()
    path = write_page(result, tmp_path / "report.html")
    before = path.read_bytes()

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", full)
    with pytest.raises(reconcile.InputError, match="No space left"):
        write_page(result, path)
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["report.html"]
