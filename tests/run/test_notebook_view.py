"""A result in a notebook: tables and two small figures, self-contained, every label escaped."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from base64 import b64decode
from html.parser import HTMLParser

import pytest

import reconcile
from reconcile.report import figures
from reconcile.report.notebook import MOST_ROWS, WIDTH

SVG = "{http://www.w3.org/2000/svg}"


class Images(HTMLParser):
    """Images of a fragment, and every tag that it holds."""

    def __init__(self, text):
        super().__init__()
        self.found, self.tags, self.attributes = [], set(), set()
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.add(tag)
        self.attributes |= {k for k, _ in attrs}
        if tag == "img":
            self.found.append(dict(attrs))


def drawing(image):
    head, data = image["src"].split(",", 1)
    assert head == "data:image/svg+xml;base64"
    return b64decode(data).decode()


@pytest.fixture(scope="module")
def skid():
    from pathlib import Path

    return reconcile.load_case(Path(__file__).resolve().parents[2] / "datasets" / "membrane_skid").run()


def test_adjustments_and_network_are_shown_small(skid):
    html = skid._repr_html_()
    bars, network = Images(html).found
    assert drawing(bars) == figures.adjustments(skid).to_svg()
    assert drawing(network) == figures.network(skid).to_svg()
    for image, figure in ((bars, figures.adjustments(skid)), (network, figures.network(skid))):
        assert 0 < int(image["width"]) <= WIDTH
        assert image["alt"] == figure.description
        assert f"<figcaption>{figure.title}</figcaption>" in html


def test_explanations_are_numbered_and_remarks_stand_below(skid):
    html = skid._repr_html_()
    listed = re.search("<ol>(.*?)</ol>", html, re.DOTALL).group(1)
    assert listed.startswith("<li>R reads high by 7.6 kg/h")
    assert "Rejected" not in listed
    assert "<p>Rejected: T alone" in html


def test_nothing_is_fetched_and_nothing_reaches_out_of_the_fragment(skid):
    html = skid._repr_html_()
    view = Images(html)
    assert not {"script", "style", "link", "iframe"} & view.tags
    assert "id" not in view.attributes
    outside = re.compile(r"https?://(?!www\.w3\.org/2000/svg)|@import|(?:xlink:)?href=\"(?!#)|<script|\bon[a-z]+=")
    assert not outside.search(re.sub(r"base64,[^\"]*", "", html))
    for image in view.found:
        assert not outside.search(drawing(image))
    assert html == skid._repr_html_()


def test_labels_are_escaped_in_the_figures_too(write_case):
    path = write_case(
        "reconcile: 1\ntitle: <i>Loop</i>\ndomains: {fluid: {unit: kg/h}}\n"
        "streams: {in: outside -> pot, out: pot -> outside}\n"
        "meters:\n"
        '  "A<b>\\"&": {reads: in.flow, unit: kg/h, sigma: 1 kg/h}\n'
        "  B: {reads: out.flow, unit: kg/h, sigma: 1 kg/h}\n"
    )
    html = reconcile.load_case(path).run({'A<b>"&': 10.0, "B": 10.5})._repr_html_()
    view = Images(html)
    assert not {"b", "i"} & view.tags
    bars = ET.fromstring(drawing(view.found[0]))
    assert any(e.text == 'A<b>"&' for e in bars.iter(SVG + "text"))


def test_of_many_snapshots_one_that_does_not_agree_is_drawn(datasets):
    result = reconcile.load_case(datasets / "membrane_log").run()
    html = result._repr_html_()
    bars, network = Images(html).found
    assert drawing(bars) == figures.adjustments(result, 7).to_svg()
    assert drawing(network) == figures.network(result, 7).to_svg()
    assert html.count(", snapshot 8</figcaption>") == 2
    assert "<td>left out: off</td>" in html
    assert "nan" not in re.sub(r"base64,[^\"]*", "", html)


def test_long_results_say_how_many_are_not_shown(datasets):
    case = reconcile.load_case(datasets / "membrane_skid")
    n = MOST_ROWS + 7
    readings = zip("FRDPTB", (50, 150, 200, 40, 160, 10), strict=True)
    html = case.run({t: [float(v)] * n for t, v in readings})._repr_html_()
    assert html.count("<tr><td>") == MOST_ROWS
    assert "<p>7 more.</p>" in html


def test_where_nothing_could_be_solved_nothing_is_drawn(skid):
    from dataclasses import replace

    failed = replace(skid, table=replace(skid.table, failed={0: reconcile.SolveError("did not settle", code="x")}))
    html = failed._repr_html_()
    assert Images(html).found == []
    assert "did not settle" in html
