"""A report's page as tests look at it."""

import re
from html.parser import HTMLParser

VOID = {"meta", "br", "link", "img", "hr", "input"}


class Page(HTMLParser):
    """Collects what the tests ask for, and refuses tags that are not closed in order."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.section = ""
        self.text: dict[str, str] = {}
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)
        if tag == "section":
            self.section = dict(attrs)["id"] or ""

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text[self.section] = self.text.get(self.section, "") + data


def assert_stands_alone(text: str) -> None:
    """The page runs no script and asks for nothing outside it."""
    page = Page(text)
    assert "http" not in text
    assert not {tag for tag, _ in page.tags} & {"script", "link", "iframe", "object", "img"}
    addresses = [
        value for _, attrs in page.tags for name, value in attrs.items() if name in ("href", "src", "xlink:href")
    ]
    assert addresses
    assert all(value and value.startswith(("#", "data:image/jpeg;base64,")) for value in addresses)
    assert "@import" not in text
    assert set(re.findall(r"url\((.)", text)) <= {"#"}


def assert_references_lead_somewhere(text: str) -> None:
    """No id stands twice, and every reference inside the page has one."""
    ids = [attrs["id"] for _, attrs in Page(text).tags if "id" in attrs]
    assert len(ids) == len(set(ids))
    used = set(re.findall(r'href="#([^"]+)"', text)) | set(re.findall(r"url\(#([^)]+)\)", text))
    assert used
    assert used <= set(ids)
