"""A page read back: tags, text and the rows of its tables."""

from html.parser import HTMLParser

VOID = {"meta", "img", "rect", "line", "br"}


class Page(HTMLParser):
    """Tags, attributes and text; fails on a tag that closes another than the last opened one."""

    def __init__(self, html: str):
        super().__init__(convert_charrefs=True)
        self.open, self.tags, self.text, self.rows = [], [], [], []
        self.feed(html)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag == "tr":
            self.rows.append([])
        if tag in ("td", "th"):
            self.rows[-1].append("")
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open and self.open.pop() == tag

    def handle_data(self, data):
        if not self.open or self.open[-1] != "style":
            self.text.append(data)
        if "td" in self.open or "th" in self.open:
            self.rows[-1][-1] += ("|" if self.open[-1] == "small" else "") + data.strip()

    def all(self, tag):
        return [attrs for name, attrs in self.tags if name == tag]

    @property
    def words(self) -> str:
        return " ".join(" ".join(self.text).split())
