"""What the tests of the report share: result folders by kind, and a reading of a page as a browser would start it."""

from __future__ import annotations

import base64
import hashlib
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from html.parser import HTMLParser
from pathlib import Path

from analysis.command.entry import run
from tests.analysis.conftest import TWO

COMMANDS = {
    "exact": ("exact",),
    "days": ("exact", "--after-days", "1,3"),
    "game-exact": ("game", "--exact", "--mixed", "--dynamics"),
    "game": ("game", "--replications", "10"),
    "game-once": ("game", "--replications", "1"),
    "search": ("game", "--exact", "--search", "best_reply"),
    "verify": ("verify", "--replications", "5"),
    "simulate": ("simulate", "--policy", "early"),
    "compare": ("compare",),
    "ledger": ("ledger", "--policy", "early", "--episode", "1", "--unit", "A"),
    "once": ("simulate", "--replications", "1"),
    "precise": ("simulate", "--precision", "0.4", "--replications", "40"),
    "sweep": ("sweep", "--demand", "0.9:1.1:2", "--target", "0.3:0.6:2"),
    "sweep-simulated": ("sweep", "--simulate", "--target", "0.3:0.6:2", "--replications", "10"),
    "align": ("align", "--demand", "1:1.1:2", "--target", "0.4:0.6:3", "--delta", "5%"),
    "align-simulated": (
        "align",
        "--simulate",
        "--target",
        "0.4:0.6:3",
        "--delta",
        "5%",
        "--replications",
        "10",
    ),
}
VOID = {"meta", "br", "img", "link", "input", "hr"}


def written_results(
    folder: Path, scenario: str = TWO, kinds: tuple[str, ...] = tuple(COMMANDS)
) -> dict[str, Path]:
    """Kind -> the folder that the command wrote, for a scenario text."""
    file = folder / "two.toml"
    file.write_text(scenario, encoding="utf-8")
    for kind in kinds:
        command, *options = COMMANDS[kind]
        assert run([command, str(file), *options, "--out", str(folder / kind), "--json"]) == 0, kind
    return {kind: folder / kind for kind in kinds}


@dataclass
class Element:
    """An element of a page with what the checks ask of it."""

    tag: str
    attributes: dict[str, str]
    parents: tuple[str, ...]
    text: str = ""


@dataclass
class Page(HTMLParser):
    """Every element of a page in order."""

    elements: list[Element] = field(default_factory=list)

    def __post_init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self._open: list[Element] = []

    def __hash__(self) -> int:
        return id(self)

    def handle_starttag(self, tag, attrs):
        element = Element(
            tag, {key: value or "" for key, value in attrs}, tuple(one.tag for one in self._open)
        )
        self.elements.append(element)
        if tag not in VOID:
            self._open.append(element)

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self._open.pop()

    def handle_endtag(self, tag):
        assert self._open and self._open[-1].tag == tag, f"</{tag}> closes {self._open[-1:]}"
        self._open.pop()

    def handle_data(self, data):
        for element in self._open:
            element.text += data

    def of(self, *tags: str) -> list[Element]:
        return [one for one in self.elements if one.tag in tags]


def page_of(html: str) -> Page:
    page = Page()
    page.feed(html)
    page.close()
    return page


def breaches(html: str) -> Iterator[str]:
    """What is wrong with a page: requests, scripts, ids, names of pictures and regions, headings, tables."""
    page = page_of(html)
    yield from _requests(page, html)
    ids = [one.attributes["id"] for one in page.elements if "id" in one.attributes]
    yield from (f"id {one} twice" for one in sorted({one for one in ids if ids.count(one) > 1}))
    for one in page.elements:
        for reference in one.attributes.get("aria-labelledby", "").split():
            if reference not in ids:
                yield f"{one.tag} is named by {reference}, which is not there"
    yield from _structure(page)


def _requests(page: Page, html: str) -> Iterator[str]:
    for one in page.elements:
        if one.tag in ("script", "link", "iframe", "object", "embed", "img", "base", "form", "foreignobject"):
            yield f"a {one.tag}"
        for key, value in one.attributes.items():
            if key.startswith("on") or key == "style":
                yield f"{one.tag} has {key}"
            if key in ("href", "src", "xlink:href", "srcset", "action") and not value.startswith(
                ("#", "data:image/png")
            ):
                yield f"{one.tag} asks for {value}"
            if re.search(r"url\((?!#)", value):
                yield f"{one.tag} asks for {value}"
    policy = [one.attributes["content"] for one in page.of("meta") if "http-equiv" in one.attributes]
    sheet = page.of("style")
    digest = (
        base64.b64encode(hashlib.sha256(sheet[0].text.encode()).digest()).decode()
        if len(sheet) == 1
        else "none"
    )
    if len(policy) != 1 or "default-src 'none'" not in policy[0] or f"'sha256-{digest}'" not in policy[0]:
        yield "no policy that fits the one style sheet"
    if sheet and re.search(r"@import|url\(", sheet[0].text):
        yield "the style sheet asks for something"


def _structure(page: Page) -> Iterator[str]:
    if page.of("html")[0].attributes.get("lang") != "en":
        yield "no language"
    for svg in page.of("svg"):
        if svg.attributes.get("role") != "img" or "aria-labelledby" not in svg.attributes:
            yield "a picture without role or name"
    told = [one for one in page.of("title", "desc") if one.parents[-1] == "svg" and one.text.strip()]
    if len(told) != 2 * len(page.of("svg")):
        yield "a picture without title or description"
    levels = [int(one.tag[1]) for one in page.of("h1", "h2", "h3", "h4")]
    if (
        levels[:1] != [1]
        or levels.count(1) != 1
        or any(b > a + 1 for a, b in zip(levels, levels[1:], strict=False))
    ):
        yield f"headings out of order: {levels}"
    for one in page.of("table"):
        if "div" not in one.parents:
            yield "a table that cannot be scrolled"
    regions = [one for one in page.elements if one.attributes.get("role") == "region"]
    if any(one.attributes.get("tabindex") != "0" for one in regions):
        yield "a region that the keyboard does not reach"
    if any("scope" not in one.attributes for one in page.of("th")):
        yield "a heading cell without scope"
    first = next(one for one in page.elements if one.tag == "a")
    if first.attributes["href"] != "#content" or not any(
        one.attributes.get("id") == "content" for one in page.of("main")
    ):
        yield "no link that skips to the content"
