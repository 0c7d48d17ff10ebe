"""A page read strictly: tags closed in their turn, nothing fetched, figures and tables with their words."""

from __future__ import annotations

import base64
import re
from dataclasses import dataclass, field
from html.parser import HTMLParser
from itertools import pairwise
from pathlib import Path
from xml.etree import ElementTree

VOID = frozenset({"meta", "link", "img", "br", "hr", "wbr"})
"""Elements without an end tag (HTML Living Standard, section 13.1.2)."""

FORBIDDEN = frozenset({"script", "iframe", "object", "embed", "base", "form", "video", "audio"})

HEADINGS = ("h1", "h2", "h3", "h4", "h5", "h6")
LOADING = ("src", "srcset", "href", "data", "poster", "action", "formaction", "background", "xlink:href")
"""Attributes through which a page fetches something or leads away."""


@dataclass
class Element:
    tag: str
    attributes: dict[str, str]
    inside: tuple[str, ...]
    text: str = ""


@dataclass
class Page(HTMLParser):
    """What a page holds, in order. AssertionError where it is not well-formed."""

    path: Path
    elements: list[Element] = field(default_factory=list)
    doctype: str = ""

    def __post_init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self._open: list[Element] = []
        source = self.path.read_text(encoding="utf-8")
        self.feed(source)
        self.close()
        assert not self._open, f"never closed: {[element.tag for element in self._open]}"

    def handle_decl(self, decl: str) -> None:
        self.doctype = decl

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        names = [name for name, _ in attrs]
        assert len(names) == len(set(names)), f"<{tag}> has an attribute twice"
        inside = tuple(element.tag for element in self._open)
        assert tag != "p" or "p" not in inside, "a paragraph in a paragraph"
        element = Element(tag, {name: value or "" for name, value in attrs}, inside)
        self.elements.append(element)
        if tag not in VOID:
            self._open.append(element)

    def handle_endtag(self, tag: str) -> None:
        assert self._open, f"</{tag}> closes nothing"
        assert self._open[-1].tag == tag, f"</{tag}> closes <{self._open[-1].tag}>"
        self._open.pop()

    def handle_data(self, data: str) -> None:
        for element in self._open:
            element.text += data

    def of(self, tag: str) -> list[Element]:
        return [element for element in self.elements if element.tag == tag]

    @property
    def text(self) -> str:
        return " ".join(self.of("main")[0].text.split())

    def classed(self, name: str) -> list[Element]:
        return [e for e in self.elements if name in e.attributes.get("class", "").split()]

    def plots(self) -> list[ElementTree.Element]:
        """The pictures of the page as XML documents."""
        found = []
        for image in self.of("img"):
            kind, _, data = image.attributes["src"].partition(",")
            assert kind == "data:image/svg+xml;base64"
            found.append(ElementTree.fromstring(base64.b64decode(data, validate=True)))
        return found

    def plot_words(self) -> str:
        """What is written in the pictures: matplotlib keeps it in comments beside the outlines."""
        images = [base64.b64decode(image.attributes["src"].partition(",")[2]) for image in self.of("img")]
        return " ".join(word for image in images for word in re.findall(r"<!-- (.*?) -->", image.decode()))


def check(page: Page) -> None:
    """What every page must keep to."""
    assert page.doctype.lower() == "doctype html"
    assert page.of("html")[0].attributes["lang"] == "en"
    assert page.of("title")[0].text.strip()
    assert not [element.tag for element in page.elements if element.tag in FORBIDDEN]
    ids = [element.attributes["id"] for element in page.elements if "id" in element.attributes]
    assert len(ids) == len(set(ids)), "an id twice"
    for element in page.elements:
        _check_fetches_nothing(page, element)
        labelled = element.attributes.get("aria-labelledby")
        assert labelled is None or labelled in ids
    for style in page.of("style"):
        assert not re.search(r"@import|url\s*\(|@font-face|expression", style.text)
    _check_words(page)
    for plot in page.plots():
        for part in plot.iter():
            assert not part.tag.endswith(("}script", "}foreignObject"))
            links = [value for name, value in part.attrib.items() if name.endswith("href")]
            # a picture within the picture, or one of its own shapes
            assert all(link.startswith(("#", "data:image/png;base64,")) for link in links)


def _check_fetches_nothing(page: Page, element: Element) -> None:
    for name, value in element.attributes.items():
        assert not name.startswith("on"), f"{element.tag} has a handler {name}"
        assert not re.search(r"https?:|javascript:|^//", value), (
            f"{element.tag} {name} leads away: {value[:80]}"
        )
        if name not in LOADING or value.startswith("data:"):
            continue
        assert (element.tag, name) == ("a", "href"), f"<{element.tag} {name}={value[:80]!r}>"
        target = page.path.parent / value
        assert "/" not in value, f"a link out of the folder: {value}"
        assert target.is_file(), f"a link to nowhere: {value}"


def _check_words(page: Page) -> None:
    levels = [HEADINGS.index(element.tag) + 1 for element in page.elements if element.tag in HEADINGS]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(deeper <= level + 1 for level, deeper in pairwise(levels)), levels
    for image in page.of("img"):
        assert len(image.attributes["alt"]) > 20
        assert "figure" in image.inside
    assert len(page.of("figcaption")) == len(page.of("figure")) == len(page.of("img"))
    assert all(caption.text.strip() for caption in page.of("figcaption") + page.of("caption"))
    assert len(page.of("caption")) == len(page.of("table")) == len(page.of("thead"))
    assert all(cell.attributes.get("scope") in ("col", "row") for cell in page.of("th"))
