"""A page read by a program: the elements of ``report.html`` without a browser."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import UTC, datetime
from html.parser import HTMLParser
from typing import Any

from exchanges import NAMES

from protobench.contract import load_contract
from protobench.evidence import build_report
from protobench.evidence.html import Particulars, html_report
from protobench.judge import RunRecord

CONTRACT = load_contract()
WRITTEN = datetime(2026, 5, 4, 12, 30, tzinfo=UTC)
VOID = {"meta", "link", "br", "use", "path", "line", "rect", "circle", "img", "hr", "input"}


@dataclass
class Element:
    """An element with its attributes, its text and all that is in it."""

    tag: str
    attributes: dict[str, str]
    parts: list[Element | str] = field(default_factory=list)

    @property
    def text(self) -> str:
        return "".join(part if isinstance(part, str) else part.text for part in self.parts)

    def all(self, tag: str | None = None, **attributes: str) -> list[Element]:
        """Every element below that has the tag and the attributes."""
        found = []
        for part in self.parts:
            if isinstance(part, Element):
                if tag in (None, part.tag) and attributes.items() <= part.attributes.items():
                    found.append(part)
                found += part.all(tag, **attributes)
        return found

    def by_id(self, ident: str) -> Element:
        (found,) = self.all(id=ident)
        return found


class _Reader(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.root = Element("", {})
        self.open = [self.root]

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        element = Element(tag, {name: value or "" for name, value in attrs})
        self.open[-1].parts.append(element)
        if tag not in VOID:
            self.open.append(element)

    def handle_endtag(self, tag: str) -> None:
        if tag not in VOID:
            assert self.open[-1].tag == tag, f"</{tag}> ends <{self.open[-1].tag}>"
            self.open.pop()

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.open[-1].parts.append(Element(tag, {name: value or "" for name, value in attrs}))

    def handle_data(self, data: str) -> None:
        self.open[-1].parts.append(data)


def parse(page: str) -> Element:
    """The page; refuses elements that are not closed."""
    reader = _Reader()
    reader.feed(page)
    reader.close()
    assert reader.open == [reader.root]
    return reader.root


def page_of(record: RunRecord, more: dict[str, Any] | None = None, **particulars: Any) -> str:
    """The page of a record."""
    told = Particulars(WRITTEN, **{"cautions": "CAUTION: it may move.", "addresses": NAMES, **particulars})
    return html_report(record, build_report(record, CONTRACT) | (more or {}), CONTRACT, told)
