"""Pages taken apart for tests."""

from __future__ import annotations

import re
from html import unescape
from html.parser import HTMLParser


class Page(HTMLParser):
    """What a test wants to know of a page."""

    def __init__(self, text):
        super().__init__()
        self.ids, self.headings, self.scripts, self.tags, self.links, self.said = [], [], 0, [], [], ""
        self._inside = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        found = dict(attrs)
        self.tags.append((tag, found))
        if "id" in found:
            self.ids.append(found["id"])
        if tag == "script":
            self.scripts += 1
        if re.fullmatch("h[1-6]", tag):
            self.headings.append([int(tag[1]), ""])
        self._inside.append(tag)

    def handle_endtag(self, tag):
        while self._inside and self._inside.pop() != tag:
            pass

    def handle_data(self, data):
        if any(re.fullmatch("h[1-6]", t) for t in self._inside):
            self.headings[-1][1] += data
        if not {"script", "style"} & set(self._inside):
            self.said += data


def rows_of(text, name):
    """Cells of a table of the page, row by row, as text."""
    body = re.search(rf'<table[^>]*id="{name}".*?</table>', text, re.DOTALL).group(0)
    return [
        [unescape(re.sub("<[^>]*>", "", cell)) for cell in re.findall(r"<t[hd][^>]*>(.*?)</t[hd]>", row, re.DOTALL)]
        for row in re.findall(r"<tr.*?</tr>", body, re.DOTALL)
    ]
