"""Read a report back with the standard library's parser."""

from __future__ import annotations

from html.parser import HTMLParser

VOID = {"meta", "link", "br", "hr", "img", "input", "path", "use", "rect", "line"}


class PageReader(HTMLParser):
    """Collect tags, headings, ids, the tables' texts, and everything that would fetch or run."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.tags, self.headings, self.ids, self.fetched, self.handlers = [], [], [], [], []
        self.tables, self.texts, self.attributes = {}, [], {}
        self.open, self._table, self._cell = [], None, None
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attributes):
        named = dict(attributes)
        self.tags.append((tag, named))
        self.open.append(tag)
        if "id" in named:
            self.ids.append(named["id"])
        for name, value in attributes:
            if name in ("src", "href", "xlink:href", "srcset", "action", "data") and not value.startswith(
                "#"
            ):
                self.fetched.append((tag, name, value))
            if name.startswith("on"):
                self.handlers.append((tag, name))
        if tag in ("h1", "h2", "h3", "h4"):
            self.headings.append([tag, ""])
        if tag == "table":
            self._table = self.tables.setdefault(named["id"], [])
        if tag == "tr" and self._table is not None:
            self._table.append([])
        if tag in ("td", "th") and self._table:
            self._table[-1].append("")
            self._cell = tag

    def handle_endtag(self, tag):
        if tag in ("td", "th"):
            self._cell = None
        if tag == "table":
            self._table = None
        while self.open and self.open.pop() != tag:
            pass

    def handle_data(self, data):
        if self.open and self.open[-1] == "style":
            return
        self.texts.append(data)
        if self.headings and self.open and any(t in ("h1", "h2", "h3") for t in self.open):
            self.headings[-1][1] += data
        if self._cell and self._table:
            self._table[-1][-1] += data

    @property
    def text(self):
        return " ".join(" ".join(self.texts).split())
