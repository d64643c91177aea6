"""The page in a real browser: quiet, whole, usable with the keyboard, at every width, in both modes, in print."""

from __future__ import annotations

import os
import re
import shutil
from itertools import pairwise
from pathlib import Path

import pytest
from plants import TANKS, plant, tanks

import reconcile
from reconcile.report.page import write_page

ROOT = Path(__file__).resolve().parents[2]
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
CASES = (
    "membrane_skid",
    "crystalliser",
    "isolated_kidney",
    "cooling_water",
    "membrane_log",
    "batch_tank",
    "flotation_test",
)

pytestmark = [
    pytest.mark.browser,
    pytest.mark.skipif(CHROMIUM is None, reason="Debian's chromium is not installed: apt-get install chromium"),
    # The driver's own event loop leaves sockets to the garbage collector.
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
    pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning"),
]


@pytest.fixture(scope="module")
def browser():
    driver = pytest.importorskip("playwright.sync_api", reason="playwright, which drives the browser, is not installed")
    with driver.sync_playwright() as p:
        started = p.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield started
        started.close()


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    made = {}
    for name in CASES:
        case = reconcile.load_case(ROOT / "datasets" / name)
        made[name] = write_page(case.run(), folder / f"{name}.html", case=case)
    for name, rows, columns, snapshots in (("log", 1, 4, 200), ("campaign", 2, 6, 2000), ("plant", 8, 11, 1)):
        case = reconcile.load_case(plant(folder / name, rows, columns, snapshots=snapshots))
        made[name] = write_page(case.run(), folder / f"{name}.html", case=case)
    (folder / "tanks.yaml").write_text(TANKS, "utf-8")
    readings = tanks(96)
    readings.loc[readings.index[30], "LH"] += 14
    case = reconcile.load_case(folder / "tanks.yaml")
    made["tied"] = write_page(case.run_trajectory(readings), folder / "tied.html", case=case)
    return made


@pytest.fixture
def open_page(browser, pages):
    """Open a page; afterwards there must have been neither a message, an error nor a request."""
    opened = []

    def look(name, *, width=1280, mode="light", script=True):
        context = browser.new_context(
            viewport={"width": width, "height": 900}, color_scheme=mode, java_script_enabled=script, offline=True
        )
        page = context.new_page()
        noise: list[str] = []
        page.on("console", lambda m: noise.append(m.text))
        page.on("pageerror", lambda e: noise.append(str(e)))
        page.on("request", lambda r: noise.append(r.url) if not r.url.startswith(("file:", "data:")) else None)
        page.goto(pages[name].as_uri())
        opened.append((context, noise))
        return page

    yield look
    for context, noise in opened:
        context.close()
        assert noise == []


EVERY = (*CASES, "log", "campaign", "plant", "tied")


@pytest.mark.parametrize("name", EVERY)
def test_opens_with_every_figure_drawn(open_page, pages, name):
    page = open_page(name)
    assert pages[name].stat().st_size < 5_000_000
    assert page.title()
    drawn = page.evaluate(
        """() => Array.from(document.querySelectorAll("figure svg")).map(s => {
            const folded = s.closest("details:not([open])") || s.closest("[hidden]");
            const box = folded ? {width: 1, height: 1} : s.getBoundingClientRect();
            return {title: s.querySelector("title").textContent, desc: s.querySelector("desc").textContent,
                    shapes: s.querySelectorAll("path,rect,line,circle,text").length, width: box.width, height: box.height};
        })"""
    )
    # Of the flotation test no balance can be formed, and no two readings can be compared.
    assert len(drawn) >= (3 if name == "flotation_test" else 4)
    for d in drawn:
        assert d["title"]
        assert d["desc"]
        assert d["shapes"] >= 5
        assert d["width"] > 0
        assert d["height"] > 0
    titles = {d["title"] for d in drawn}
    if name == "tied":
        assert {
            "Inventories at the start of each window",
            "Readings over the windows",
            "Do the readings agree?",
        } <= titles
        return
    assert {"How far each reading was moved", "The network", "What each reading's check is worth"} <= titles
    if name in ("log", "campaign", "isolated_kidney"):
        assert "Do the readings agree?" in titles
    if name in ("log", "campaign"):
        assert any(t.startswith("Bias of ") for t in titles)


@pytest.mark.parametrize("name", EVERY)
@pytest.mark.parametrize("width", [360, 640, 1280])
def test_nothing_runs_over_the_edge(open_page, name, width):
    # 640 pixels are a 1280 pixel window at 200 % zoom.
    page = open_page(name, width=width)
    page.evaluate("document.querySelectorAll('details:not(.snapshot)').forEach(d => { d.open = true; })")
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    beyond = page.evaluate(
        """() => Array.from(document.querySelectorAll("body *")).filter(e => {
            const b = e.getBoundingClientRect();
            return b.width > 0 && b.right > innerWidth + 1 && !e.closest(".scroll, pre, svg") && !e.closest(".skip");
        }).map(e => e.tagName + ": " + e.textContent.slice(0, 60))"""
    )
    assert beyond == []


@pytest.mark.parametrize("name", [*CASES, "tied"])
def test_texts_of_figures_do_not_cover_each_other(open_page, name):
    page = open_page(name)
    clashes = page.evaluate(
        """() => {
            const out = [];
            document.querySelectorAll("figure svg").forEach(svg => {
                if (svg.closest("details:not([open])") || svg.closest("[hidden]")) { return; }
                const boxes = Array.from(svg.querySelectorAll("text:not([transform])")).map(t => [t.textContent, t.getBBox()]);
                boxes.forEach(([a, p], i) => boxes.slice(i + 1).forEach(([b, q]) => {
                    const w = Math.min(p.x + p.width, q.x + q.width) - Math.max(p.x, q.x);
                    const h = Math.min(p.y + p.height, q.y + q.height) - Math.max(p.y, q.y);
                    if (w > 1.5 && h > 4) { out.push(svg.querySelector("title").textContent + ": " + a + " / " + b); }
                }));
            });
            return out;
        }"""
    )
    assert clashes == []


@pytest.mark.parametrize("name", ["membrane_skid", "plant", "tied"])
def test_texts_of_figures_stay_on_their_sheet(open_page, name):
    page = open_page(name)
    off = page.evaluate(
        """() => Array.from(document.querySelectorAll("figure svg")).flatMap(svg => {
            const view = svg.viewBox.baseVal;
            return Array.from(svg.querySelectorAll("text:not([transform])")).filter(t => {
                const b = t.getBBox();
                return b.width && (b.x < -1 || b.x + b.width > view.width + 1 || b.y + b.height > view.height + 1);
            }).map(t => t.textContent);
        })"""
    )
    assert off == []


# ------------------------------------------------------------------ script


def column(page, table, index):
    return page.evaluate(
        "([t, i]) => Array.from(document.querySelectorAll(`#${t} tbody tr`)).map(r => r.cells[i].textContent)",
        [table, index],
    )


def test_tables_sort_by_number_and_by_word_and_back(open_page):
    page = open_page("membrane_skid")
    before = column(page, "readings-table", 0)
    moved = page.query_selector_all("#readings-table thead button")[6]
    moved.click()
    values = [float(v) for v in column(page, "readings-table", 6)]
    assert values == sorted(values)
    assert page.get_attribute("#readings-table thead th:nth-child(7)", "aria-sort") == "ascending"
    moved.click()
    values = [float(v) for v in column(page, "readings-table", 6)]
    assert values == sorted(values, reverse=True)
    moved.click()
    assert column(page, "readings-table", 0) == before
    assert page.get_attribute("#readings-table thead th:nth-child(7)", "aria-sort") is None
    page.query_selector("#readings-table thead button").click()
    names = column(page, "readings-table", 0)
    assert names == sorted(before)


def test_sorting_works_from_the_keyboard(open_page):
    page = open_page("membrane_skid")
    page.focus("#balances-table thead th:nth-child(7) button")
    page.keyboard.press("Enter")
    values = [float(v) for v in column(page, "balances-table", 6)]
    assert values == sorted(values)


def test_numbers_that_are_missing_sort_to_the_end(open_page):
    page = open_page("crystalliser")
    page.query_selector_all("#unread thead button")[2].click()
    assert column(page, "unread", 2)[-2:] == ["-", "-"]


def test_slider_shows_one_snapshot_at_a_time(open_page):
    page = open_page("log")
    visible = "Array.from(document.querySelectorAll('details.snapshot')).filter(d => d.getClientRects().length).map(d => d.id)"
    first = page.evaluate(visible)
    assert len(first) == 1
    page.focus("#which")
    page.keyboard.press("ArrowRight")
    after = page.evaluate(visible)
    assert len(after) == 1
    assert after != first
    label = page.get_attribute(f"#{after[0]}", "data-label")
    assert page.text_content(".chooser output") == label
    assert page.get_attribute("#which", "aria-valuetext") == label


def test_a_snapshot_is_reached_from_the_table(open_page):
    page = open_page("log")
    page.click("text=Table of all 200 snapshots")
    link = page.query_selector("#snapshots-table tr.marked a")
    link.click()
    shown = page.evaluate("location.hash.slice(1)")
    assert page.evaluate(f"document.getElementById('{shown}').getClientRects().length") > 0
    assert page.text_content(".chooser output") == page.get_attribute(f"#{shown}", "data-label")


@pytest.mark.parametrize("name", ["membrane_skid", "isolated_kidney", "membrane_log", "tied"])
def test_everything_can_be_read_without_script(open_page, name):
    page = open_page(name, script=False)
    assert page.query_selector(".verdict p").is_visible()
    assert page.query_selector("table caption").is_visible()
    assert not page.query_selector(".chooser") or not page.query_selector(".chooser").is_visible()
    for detail in page.query_selector_all("details.snapshot:not([open]) > summary"):
        detail.click()
    assert all(d.is_visible() for d in page.query_selector_all("details.snapshot table"))


# ------------------------------------------------------------------ access

AUDIT = """() => {
  const luminance = c => [0.2126, 0.7152, 0.0722].reduce((s, w, i) => {
    const v = c[i] / 255; return s + w * (v <= 0.04045 ? v / 12.92 : Math.pow((v + 0.055) / 1.055, 2.4)); }, 0);
  const parse = t => { const m = t.match(/[\\d.]+/g).map(Number); return m.length < 4 || m[3] > 0 ? m : null; };
  const ratio = (a, b) => { const x = [luminance(a), luminance(b)].sort((p, q) => q - p); return (x[0] + 0.05) / (x[1] + 0.05); };
  const behind = e => { for (; e; e = e.parentElement) {
    const c = parse(getComputedStyle(e).backgroundColor); if (c) { return c; } } return [255, 255, 255]; };
  const out = {contrast: [], names: [], tables: []};
  document.querySelectorAll("body *").forEach(e => {
    if (!e.getClientRects().length || e.closest("[aria-hidden]")) { return; }
    const own = Array.from(e.childNodes).some(n => n.nodeType === 3 && n.textContent.trim());
    if (!own || e.closest("script, style, svg title, svg desc")) { return; }
    const style = getComputedStyle(e);
    const colour = parse(e.closest("svg") ? style.fill : style.color);
    const found = ratio(colour, behind(e.closest("svg") || e));
    if (found < 4.5) { out.contrast.push([e.tagName, e.textContent.slice(0, 40), found]); }
  });
  const named = e => (e.getAttribute("aria-label") || e.textContent || "").trim() || (e.labels && e.labels.length) ||
    (e.getAttribute("aria-labelledby") || "").split(" ").every(i => i && document.getElementById(i));
  document.querySelectorAll("a, button, input, summary, svg[role], [tabindex], nav, section, output").forEach(e => {
    if (!named(e)) { out.names.push(e.outerHTML.slice(0, 80)); } });
  document.querySelectorAll("table").forEach(t => {
    const wrong = Array.from(t.rows).filter(r => !r.cells[0] || r.cells[0].tagName !== "TH");
    if (!t.caption || !t.caption.textContent.trim() || wrong.length) { out.tables.push(t.id); } });
  out.headings = Array.from(document.querySelectorAll("h1,h2,h3,h4")).filter(h => h.getClientRects().length)
    .map(h => Number(h.tagName[1]));
  out.ids = Array.from(document.querySelectorAll("[id]")).map(e => e.id);
  out.landmarks = ["main", "nav", "header", "footer"].map(n => document.querySelectorAll("body " + n).length);
  out.lang = document.documentElement.lang;
  out.unreachable = Array.from(document.querySelectorAll(".scroll, pre")).filter(e =>
    e.scrollWidth > e.clientWidth + 1 && e.tabIndex < 0).length;
  return out;
}"""


@pytest.mark.parametrize("mode", ["light", "dark"])
@pytest.mark.parametrize("name", ["membrane_skid", "isolated_kidney", "log", "membrane_log", "batch_tank", "tied"])
def test_audit_of_contrast_names_order_and_tables(open_page, name, mode):
    page = open_page(name, mode=mode)
    found = page.evaluate(AUDIT)
    assert found["contrast"] == []
    assert found["names"] == []
    assert found["tables"] == []
    assert found["landmarks"] == [1, 1, 1, 1]
    assert found["lang"] == "en"
    assert found["unreachable"] == 0
    assert found["headings"][0] == 1
    assert all(b <= a + 1 for a, b in pairwise(found["headings"]))
    assert len(found["ids"]) == len(set(found["ids"]))


@pytest.mark.parametrize(("mode", "pale"), [("light", "#888888"), ("dark", "#666666")])
def test_audit_notices_what_is_wrong(open_page, mode, pale):
    page = open_page("membrane_skid", mode=mode)
    page.evaluate(
        """pale => {
            document.querySelector(".note").style.color = pale;
            document.querySelector("table caption").remove();
            document.body.insertAdjacentHTML("beforeend", "<button></button>");
        }""",
        pale,
    )
    found = page.evaluate(AUDIT)
    assert found["contrast"]
    assert len(found["tables"]) == 1
    assert len(found["names"]) == 1


def test_keyboard_reaches_verdict_contents_and_tables(open_page):
    page = open_page("membrane_skid", width=360)
    reached = []
    for _ in range(40):
        page.keyboard.press("Tab")
        reached.append(
            page.evaluate("document.activeElement.className + ' ' + document.activeElement.tagName + ' ' + "
                          "(document.activeElement.getAttribute('href') || '')")
        )  # fmt: skip
    assert reached[0].startswith("skip A #verdict")
    assert any("#explanations" in r for r in reached)
    assert any(r.startswith("scroll DIV") for r in reached)
    assert any("BUTTON" in r for r in reached)


def test_dark_mode_is_dark_and_print_is_light(open_page):
    page = open_page("membrane_skid", mode="dark")
    shade = "getComputedStyle(document.body).backgroundColor.match(/\\d+/g).map(Number).reduce((a, b) => a + b)"
    assert page.evaluate(shade) < 120
    page.emulate_media(media="print", color_scheme="dark")
    assert page.evaluate(shade) > 600
    assert page.evaluate("getComputedStyle(document.querySelector('nav')).display") == "none"


def test_prints_on_paper(open_page, tmp_path):
    page = open_page("membrane_skid")
    pdf = page.pdf(format="A4")
    assert pdf[:5] == b"%PDF-"
    assert 3 <= len(re.findall(rb"/Type\s*/Page[^s]", pdf)) <= 12
    page.emulate_media(media="print")
    page.set_viewport_size({"width": 718, "height": 1000})
    assert page.evaluate("document.documentElement.scrollWidth") <= 718


def test_wide_networks_scroll_by_themselves(open_page):
    page = open_page("plant", width=640)
    box = page.evaluate(
        "(() => { const s = document.querySelector('#network-figure .scroll');"
        " return [s.scrollWidth, s.clientWidth, s.tabIndex]; })()"
    )
    assert box[0] > 2 * box[1]
    assert box[2] == 0


def test_a_figure_stands_alone_in_the_browser(browser, tmp_path):
    from reconcile.report import figures

    result = reconcile.load_case(ROOT / "datasets" / "membrane_skid").run()
    path = figures.network(result).save(tmp_path / "network.svg")
    page = browser.new_page()
    page.goto(path.as_uri())
    assert page.evaluate("document.documentElement.tagName") == "svg"
    assert page.evaluate("getComputedStyle(document.querySelector('text')).fontSize") == "13px" or page.query_selector(
        "text"
    )
    fills = page.evaluate(
        "new Set(Array.from(document.querySelectorAll('text')).map(t => getComputedStyle(t).fill)).size"
    )
    assert fills >= 3
    page.close()


# ------------------------------------------------------------------ the picture of the page

PICTURE = ROOT / "datasets" / "membrane_skid" / "report.png"
"""The picture in the README. To make it again, from the folder of the project:

    REMAKE_PICTURE=1 python -m pytest -m browser tests/report/test_browser.py -k picture
"""


def test_the_picture_of_the_page_shows_what_the_page_is_today(browser, pages, tmp_path):
    page = browser.new_page(viewport={"width": 1120, "height": 900}, device_scale_factor=1.25)
    page.goto(pages["membrane_skid"].as_uri())
    end = page.evaluate("document.querySelector('#network-figure').getBoundingClientRect().bottom + scrollY + 20")
    target = PICTURE if os.environ.get("REMAKE_PICTURE") else tmp_path / "report.png"
    clip = {"x": 0, "y": 0, "width": 1120, "height": round(end)}
    target.write_bytes(page.screenshot(full_page=True, clip=clip))
    page.close()
    # Fonts and browsers differ a little from machine to machine: only the sizes are compared.
    made, kept = size_of(target), size_of(PICTURE)
    assert made[0] == kept[0] == 1400
    assert made[1] == pytest.approx(kept[1], rel=0.1)
    assert PICTURE.stat().st_size < 400_000
    assert f"]({PICTURE.relative_to(ROOT).as_posix()})" in (ROOT / "README.md").read_text("utf-8")


def size_of(path):
    """Width and height of a PNG, from its header (ISO/IEC 15948, 11.2.2)."""
    data = path.read_bytes()
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    assert data[12:16] == b"IHDR"
    return int.from_bytes(data[16:20], "big"), int.from_bytes(data[20:24], "big")
