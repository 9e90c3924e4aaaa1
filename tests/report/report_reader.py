"""Reads a finished report back and checks what must hold for every one."""

import re
from collections.abc import Iterator
from html.parser import HTMLParser
from xml.etree import ElementTree

EMPTY = {"meta", "br", "hr", "img", "input", "link"}


class Page(HTMLParser):
    """Reads a page: complains of tags that don't match, keeps texts, ids, rows and references."""

    def __init__(self, html: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: set[str] = set()
        self.ids: list[str] = []
        self.links: list[str] = []
        self.attributes: set[str] = set()
        self.rows: list[list[str]] = []
        self.text = ""
        self.feed(html)
        self.close()
        assert self.open == [], "tags left open"

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.handle_startendtag(tag, attrs)
        if tag not in EMPTY:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.add(tag)
        names = [name for name, _ in attrs]
        assert len(names) == len(set(names)), f"attribute twice in <{tag}>"
        self.attributes.update(names)
        self.ids += [value or "" for name, value in attrs if name == "id"]
        self.links += [value or "" for name, value in attrs if name in ("href", "src")]
        if tag == "tr":
            self.rows.append([])
        if tag in ("td", "th"):
            self.rows[-1].append("")

    def handle_endtag(self, tag: str) -> None:
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if "style" not in self.open:
            self.text += data
        if {"td", "th"} & set(self.open):
            self.rows[-1][-1] += data.strip("\n")


def drawings(html: str) -> Iterator[ElementTree.Element]:
    """Yield each inline drawing, parsed as XML."""
    return (ElementTree.fromstring(svg) for svg in re.findall(r"<svg.*?</svg>", html, re.DOTALL))


def check(html: str) -> Page:
    """Check what must hold for every report and return it read."""
    page = Page(html)
    assert html.startswith("<!DOCTYPE html>\n")
    assert len(page.ids) == len(set(page.ids)), "id used twice"
    assert all(link.startswith("#") and link[1:] in page.ids for link in page.links)
    assert not re.search(r"https?:|//[a-z]|url\(|@import", html), "asks the network"
    assert not {"script", "link", "img", "iframe", "object"} & page.tags
    assert not [name for name in page.attributes if name.startswith("on") or name == "style"]
    assert not re.search(r"\b(None|nan|inf)\b", page.text), "a number that is none"
    for svg in drawings(html):
        assert svg.findtext("title") and svg.findtext("desc")
        numbers = " ".join(
            v for e in svg.iter() for k, v in e.attrib.items() if k in ("x", "y", "points", "x1")
        )
        assert re.fullmatch(r"[-\d., ]*", numbers)
    return page
