"""Reading a page back as a reader would: its words, its tables, its links."""

from dataclasses import dataclass, field
from html.parser import HTMLParser
from typing import Any

from django.http import HttpResponse
from django.test import Client

from evidence.models import Person

_INLINE = {"a", "strong", "span", "em", "text", "tspan"}
_VOID = {"meta", "link", "input", "br", "img", "hr"}


@dataclass
class Node:
    tag: str
    attributes: dict[str, str | None]
    children: list["Node | str"] = field(default_factory=list)

    @property
    def text(self) -> str:
        """The text as it stands, elements that start a line of their own set apart by a blank."""
        joined = "".join(child if isinstance(child, str) else child.text for child in self.children)
        return joined if self.tag in _INLINE else f" {joined} "

    @property
    def words(self) -> str:
        """The text with every run of blanks and line ends as one blank; no-break spaces stay."""
        return " ".join(part for part in self.text.replace("\n", " ").split(" ") if part)

    def every(self, tag: str, **attributes: str) -> list["Node"]:
        found = []
        for child in self.children:
            if isinstance(child, Node):
                fits = all(child.attributes.get(name.rstrip("_")) == value for name, value in attributes.items())
                if child.tag == tag and fits:
                    found.append(child)
                found += child.every(tag, **attributes)
        return found

    def one(self, tag: str, **attributes: str) -> "Node":
        (found,) = self.every(tag, **attributes)
        return found

    def table(self) -> list[list[str]]:
        return [
            [cell.words for cell in row.children if isinstance(cell, Node) and cell.tag in ("th", "td")]
            for row in self.every("tr")
        ]


class _Builder(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.root = Node("root", {})
        self.open = [self.root]

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        node = Node(tag, dict(attrs))
        self.open[-1].children.append(node)
        if tag not in _VOID:
            self.open.append(node)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.open[-1].children.append(Node(tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if self.open[-1].tag != tag:
            raise AssertionError(f"</{tag}> closes <{self.open[-1].tag}>: the page is not well nested")
        self.open.pop()

    def handle_data(self, data: str) -> None:
        self.open[-1].children.append(data)


def signed_in(person: Person) -> Client:
    client = Client()
    client.force_login(person)
    return client


def page(response: HttpResponse, status: int = 200) -> Node:
    """The page of a response, which must have this status and be well nested."""
    content: Any = response.content
    assert response.status_code == status, content[:2000]
    builder = _Builder()
    builder.feed(content.decode())
    builder.close()
    assert builder.open == [builder.root]
    return builder.root
