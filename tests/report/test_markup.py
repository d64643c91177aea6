"""Whatever comes from a user stays text."""

from __future__ import annotations

from html.parser import HTMLParser

from hypothesis import given
from hypothesis import strategies as st

from reconcile.report.markup import Markup, element, join, text_of


def test_text_is_escaped_and_markup_is_not():
    assert element("p", "<b> & \"'", title='"><script>') == (
        '<p title="&quot;&gt;&lt;script&gt;">&lt;b&gt; &amp; &quot;&#x27;</p>'
    )
    assert element("p", element("b", "x"), None) == "<p><b>x</b></p>"
    assert join("<", Markup("<br>")) == "&lt;<br>"


def test_attributes_are_named_left_out_and_rounded():
    assert element("input", class_="a", data_x=1.5, hidden=True, disabled=False, value=None) == (
        '<input class="a" data-x="1.5" hidden>'
    )
    assert element("rect", x=0.123456, width=2.0) == '<rect x="0.12" width="2"></rect>'


def test_characters_that_no_document_may_hold_are_replaced():
    assert text_of("a\x00b\x1bc\n") == "a\ufffdb\ufffdc\n"


class _Collector(HTMLParser):
    def __init__(self):
        super().__init__()
        self.tags, self.text, self.attributes = [], "", []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs

    def handle_data(self, data):
        self.text += data


@given(st.text(st.characters(min_codepoint=32, exclude_categories=("Cs", "Cc"))))
def test_any_text_comes_back_as_it_was(text):
    collector = _Collector()
    collector.feed(element("p", text, title=text))
    collector.close()
    assert collector.tags == ["p"]
    assert collector.text == text
    assert collector.attributes == [("title", text)]
