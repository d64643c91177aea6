"""Figures: what they draw stands where the numbers say, and each brings its sentence and its numbers."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET

import numpy as np
import pytest

import reconcile
from reconcile.planner import place_meters
from reconcile.report import figures
from reconcile.report.canvas import Scale, cut, text_width, tick_text, ticks
from reconcile.report.page import figures_of

SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture(scope="module")
def skid_case():
    from pathlib import Path

    return reconcile.load_case(Path(__file__).resolve().parents[2] / "datasets" / "membrane_skid")


@pytest.fixture(scope="module")
def skid(skid_case):
    return skid_case.run()


def shapes(figure, tag, role):
    """Attributes of the shapes of one kind that carry a role."""
    root = ET.fromstring(figure.to_svg())
    return [e.attrib for e in root.iter(SVG + tag) if role in e.get("class", "").split()]


def texts(figure):
    return [e.text for e in ET.fromstring(figure.to_svg()).iter(SVG + "text")]


# ------------------------------------------------------------------ the sheet


def test_ticks_are_round_and_inside():
    for low, high in ((0.0, 1.0), (-3.3, 7.1), (1e-6, 5e-6), (-120.0, 4000.0)):
        found = ticks(low, high, 5)
        assert 3 <= len(found) <= 12
        assert all(low - 1e-12 <= v <= high + 1e-12 for v in found)
        step = found[1] - found[0]
        assert step / 10 ** np.floor(np.log10(step * 1.0000001)) == pytest.approx(
            min((1, 2, 2.5, 5, 10), key=lambda s: abs(s - step / 10 ** np.floor(np.log10(step * 1.0000001))))
        )


def test_tick_text_has_the_decimals_of_its_step():
    assert [tick_text(v, 0.025) for v in (1.0, 1.025, 1.05)] == ["1.000", "1.025", "1.050"]
    assert tick_text(20.0, 10.0) == "20"


def test_scale_keeps_far_values_at_its_end():
    scale = Scale(0.0, 10.0, 100.0, 200.0)
    assert scale(5.0) == 150.0
    assert scale(99.0) == 200.0
    assert scale.beyond(99.0)


def test_a_shortened_text_keeps_both_ends_and_fits():
    text = cut("reactor_3_bottom_outlet_flow_A", 100)
    assert text_width(text) <= 100
    assert text.startswith("rea")
    assert text.endswith("A")
    assert "…" in text


# ------------------------------------------------------------------ every figure


def every_figure(skid_case, skid):
    labels = [f"2024-05-{d:02d}" for d in range(1, 31)]
    rng = np.random.default_rng(5)
    bias = np.r_[np.zeros(15), np.full(15, 2.0)] + rng.normal(0, 0.4, 30)
    up = np.maximum.accumulate(np.cumsum(np.maximum(bias, 0)))
    flow = np.array([20.0, 40.0, 60.0, 80.0])
    return [
        *figures_of(skid, skid_case).values(),
        figures.bias_track("R", "kg/h", labels, bias, np.full(30, 0.4), up, np.zeros(30), 5.0, [(15, 13, 16)]),
        figures.closure_against_flow(
            "loop", flow, 0.05 * flow, np.full(4, 0.3),
            [("a constant loss", 2.5, 0.0, 60.0, 7.81), ("an error of scale", 0.0, 0.05, 0.1, 7.81)],
            flow_unit="kg/h", unit="kg/h",
        ),
        figures.time_series(
            labels, [("R", "kg/h", 100 + bias, np.full(30, 100.0), np.full(30, 0.5))], [""] * 20 + ["X"] * 10
        ),
        figures.placements(place_meters(skid_case, find="B")),
    ]  # fmt: skip


def test_each_has_title_sentence_numbers_and_something_drawn(skid_case, skid):
    drawn = every_figure(skid_case, skid)
    assert {f.name for f in drawn} >= {
        "network", "balances", "adjustments", "detectability", "look-alikes", "bias-R", "closure-against-flow", "series",
        "placements",
    }  # fmt: skip
    for f in drawn:
        root = ET.fromstring(f.to_svg())
        assert root.find(SVG + "title").text == f.title
        assert root.find(SVG + "desc").text == f.description
        assert f.description.endswith(".")
        assert len(list(root)) > 8
        assert f.rows
        assert all(len(row) == len(f.header) for row in f.rows)
        assert "nan" not in f.to_svg()
        assert "inf" not in re.sub(r"<text.*?</text>|<desc.*?</desc>|<title.*?</title>", "", f.to_svg())


def test_no_text_leaves_its_sheet(skid_case, skid):
    for f in every_figure(skid_case, skid):
        for e in ET.fromstring(f.to_svg()).iter(SVG + "text"):
            if e.get("transform"):
                continue
            width = text_width(e.text, float(e.get("font-size", 12))) * 0.86  # the estimate is from above
            x = float(e.get("x"))
            left = {"start": x, "middle": x - width / 2, "end": x - width}[e.get("text-anchor", "start")]
            assert left >= -2, (f.name, e.text)
            assert left + width <= f.canvas.width + 2, (f.name, e.text)
            assert 0 < float(e.get("y")) <= f.canvas.height


def test_files(skid, tmp_path):
    pytest.importorskip("resvg_py", reason="resvg-py, which turns drawings into pixels, is not installed")
    f = figures.network(skid)
    assert f.save(tmp_path / "network.svg").read_text(encoding="utf-8").startswith("<?xml")
    png = f.save(tmp_path / "network.png").read_bytes()
    assert png[:8] == b"\x89PNG\r\n\x1a\n"
    width = int.from_bytes(png[16:20], "big")
    assert width == pytest.approx(2 * f.canvas.width, abs=2)
    with pytest.raises(reconcile.InputError, match="figure-format"):
        f.save(tmp_path / "network.jpg")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["network.png", "network.svg"]


def test_pixels_without_their_library_are_asked_for_in_words(skid, monkeypatch):
    monkeypatch.setitem(__import__("sys").modules, "resvg_py", None)
    with pytest.raises(reconcile.MissingExtra, match=r"pip install 'reconcile-flows\[report\]'"):
        figures.network(skid).to_png()


def test_notebooks_get_colours_and_the_drawing(skid):
    shown = figures.network(skid)._repr_html_()
    assert shown.startswith("<style>")
    assert "<svg" in shown
    assert "✗ 158.60 → 154.14 kg/h" in shown


def test_the_same_result_gives_the_same_drawing(skid_case, skid):
    again = figures_of(skid_case.run(), skid_case)
    assert {n: f.to_svg() for n, f in figures_of(skid, skid_case).items()} == {n: f.to_svg() for n, f in again.items()}


# ------------------------------------------------------------------ what they say


def test_bars_of_adjustments_have_the_length_of_the_numbers(skid):
    f = figures.adjustments(skid)
    s = skid.snapshot()
    bars = [b for b in shapes(f, "rect", "f-main") if float(b["height"]) == 11]
    named = [b for b in shapes(f, "rect", "f-mark") if float(b["height"]) == 11]
    moved = {r.tag: r.in_sigmas for r in s.readings}
    assert len(bars) == 5
    assert len(named) == 1
    unit = float(named[0]["width"]) / abs(moved["R"])
    others = [abs(v) for t, v in moved.items() if t != "R"]
    assert [float(b["width"]) / unit for b in bars] == pytest.approx(others, abs=0.05)
    # The limit stands on both sides of zero, in the same scale.
    limits = [float(x["x1"]) for x in shapes(f, "line", "s-mark") if x.get("stroke-dasharray") == "6 4"]
    assert (max(limits) - min(limits)) / 2 / unit == pytest.approx(s.meter_tests.limit, abs=0.02)
    assert f"limit {s.meter_tests.limit:.2f}" in texts(f)


def test_balances_show_their_ratio_and_mark_what_is_beyond(skid):
    f = figures.balances(skid)
    dots = [float(d["cx"]) for d in shapes(f, "circle", "f-mark")] + [
        float(d["cx"]) for d in shapes(f, "circle", "f-main")
    ][1:]
    band = shapes(f, "rect", "f-wash")[0]
    unit = float(band["width"]) / 4
    zero = float(band["x"]) + 2 * unit
    ratios = [b.ratio for b in skid.snapshot().balances]
    assert sorted((d - zero) / unit for d in dots) == pytest.approx(sorted(ratios), abs=0.03)
    assert len(shapes(f, "circle", "f-mark")) == 2


def test_network_marks_the_suspect_by_symbol_and_double_line(skid):
    f = figures.network(skid)
    assert "✗ 158.60 → 154.14 kg/h" in texts(f)
    assert len([p for p in shapes(f, "path", "s-mark") if "stroke-dasharray" not in p]) == 1
    assert len(shapes(f, "path", "s-card")) == 1
    assert [r[0] for r in f.rows if r[-1] == "suspect"] == ["recycle"]


def test_network_dashes_what_is_not_read(datasets):
    f = figures.network(reconcile.load_case(datasets / "crystalliser").run())
    dashed = [p for p in shapes(f, "path", "s-ink") if "stroke-dasharray" in p]
    assert len(dashed) == 3
    assert texts(f).count("unknown kg/h") == 2


def test_network_names_nodes_that_may_leak(datasets):
    f = figures.network(reconcile.load_case(datasets / "crystalliser").run())
    assert "? mixer" in texts(f)


def test_line_widths_follow_the_flow(skid):
    f = figures.network(skid)
    widths = {round(float(p["stroke-width"]), 2) for p in shapes(f, "path", "s-ink")}
    assert len(widths) == 5
    assert max(widths) == pytest.approx(4.2)


def test_large_network_shows_the_neighbourhood_of_the_suspect(tmp_path):
    from plants import plant

    result = reconcile.load_case(plant(tmp_path, 12, 14)).run()
    f = figures.network(result)
    assert "60 of 269 streams are drawn" in f.description
    shown = {r[0] for r in f.rows}
    assert len(shown) == 60
    named = {r.reads.removesuffix(".flow") for r in result.snapshot().readings if r.word == "suspect"}
    assert named <= shown


def test_detectability_says_not_checked(write_case):
    path = write_case(
        "reconcile: 1\ntitle: One pot and a lone stream (invented)\ndomains: {fluid: {unit: kg/h}}\n"
        "streams: {in: outside -> pot, out: pot -> outside, a: outside -> tank, b: tank -> outside}\n"
        "meters:\n  A: {reads: in.flow, unit: kg/h, sigma: 1 kg/h}\n  B: {reads: out.flow, unit: kg/h, sigma: 1 kg/h}\n"
        "  C: {reads: a.flow, unit: kg/h, sigma: 1 kg/h}\nreadings: readings.csv\n",
        "A,B,C\n10,10.5,4\n",
    )
    case = reconcile.load_case(path)
    f = figures.detectability(case.coverage)
    assert "○ not checked" in texts(f)
    assert next(r for r in f.rows if r[0] == "C")[4] == "never"
    bar = figures.adjustments(case.run())
    assert "not checked" in texts(bar)


def test_look_alikes_hold_the_lower_triangle_with_numbers():
    a = np.array([[1.0, 1.0, 0.0, 1.0], [0.0, 0.0, 1.0, 1.0]])
    correlation = figures.correlation_of(a)
    assert correlation[0, 3] == pytest.approx(0.5**0.5)
    f = figures.look_alikes(["A", "B", "C", "D"], correlation)
    assert sorted(t for t in texts(f) if re.fullmatch(r"=?[+-]?\d\.\d\d", t)) == sorted(
        ["=+1.00", "0.00", "0.00", "+0.71", "+0.71", "+0.71"]
    )
    assert "A and B" in f.description or "B and A" in f.description


def test_time_series_break_at_gaps_and_hatch_flags():
    labels = [f"2024-05-{d:02d}" for d in range(1, 21)]
    value = np.full(20, 5.0)
    value[9:11] = np.nan
    flags = [""] * 15 + ["X"] * 3 + [""] * 2
    f = figures.time_series(labels, [("FT", "L/min", value + 0.1, value, np.full(20, 0.2))], flags)
    assert len(shapes(f, "path", "s-main")) == 2
    root = ET.fromstring(f.to_svg())
    hatched = [e for e in root.iter(SVG + "rect") if "hatch" in (e.get("style") or "") and e.get("opacity")]
    assert len(hatched) == 1
    assert "X" in texts(f)
    assert len(f.rows) == 18


def test_times_keep_their_distances():
    from reconcile.report.figures.axes import place_of

    course = place_of(["2024-05-01", "2024-05-02", "2024-05-05"])
    assert course.timed
    assert (course.x[2] - course.x[1]) == pytest.approx(3 * (course.x[1] - course.x[0]))
    assert not place_of(["a", "b", "c"]).timed


def test_long_series_keep_their_extremes():
    values = np.zeros(5000)
    values[1234], values[4321] = 9.0, -7.0
    labels = [str(i) for i in range(5000)]
    f = figures.time_series(labels, [("FT", "L/min", values, np.zeros(5000), np.full(5000, 0.2))], [""] * 5000)
    assert {"1234", "4321"} <= {r[1] for r in f.rows}
    assert len(f.rows) < 600


def test_bias_track_draws_its_onset():
    n = 40
    labels = [str(i) for i in range(n)]
    f = figures.bias_track(
        "R", "kg/h", labels, np.r_[np.zeros(20), np.ones(20)], np.full(n, 0.2), np.linspace(0, 9, n), np.zeros(n), 5.0,
        [(20, 18, 22)],
    )  # fmt: skip
    glow = shapes(f, "rect", "f-glow")[0]
    from reconcile.report.figures.axes import place_of

    course = place_of(labels)
    assert float(glow["x"]) == pytest.approx(course.x[18], abs=0.01)
    assert float(glow["width"]) == pytest.approx(course.x[22] - course.x[18], abs=0.02)
    assert "most likely began at 20, between 18 and 22" in f.description


def test_models_against_flow_are_said_to_be_excluded_or_not():
    flow = np.array([20.0, 40.0, 80.0])
    f = figures.closure_against_flow(
        "loop",
        flow,
        0.05 * flow,
        np.full(3, 0.3),
        [("a loss", 2.5, 0.0, 60.0, 5.99), ("a scale", 0.0, 0.05, 0.1, 5.99)],
    )
    assert "a loss leaves χ² 60.00 (excluded" in f.description
    assert "a scale leaves χ² 0.10 (not excluded" in f.description
    lines = [x for x in shapes(f, "line", "s-mark") if x.get("stroke-dasharray") == "8 4"]
    assert float(lines[0]["y2"]) < float(lines[0]["y1"])


def test_placements_put_the_best_first(skid_case):
    found = place_meters(skid_case, find="B")
    f = figures.placements(found)
    assert f.rows[0][0] == found.offers[found.ranked[0].meters[0]].variable
    then = [float(r[2]) for r in f.rows if r[2] != "never"]
    assert then == sorted(then)
