"""SVG elements as text. Every label and attribute goes through `element`, which escapes; nothing else builds tags."""

import re
import unicodedata
from xml.sax.saxutils import escape, quoteattr

# XML 1.0 (section 2.2) has no way to write these characters, not even escaped.
_NOT_XML = re.compile("[^\t\n\r\u0020-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")
# The one attribute used here that is not all lower case.
_CASED = {"viewbox": "viewBox"}
_ATTRIBUTE_NAME = re.compile(r"[a-zA-Z][a-zA-Z0-9-]*\Z")


def plain(text: str) -> str:
    """`text` as XML character data: characters XML cannot hold are dropped, markup is escaped."""
    return escape(_NOT_XML.sub("", text))


def element(name: str, content: str = "", /, **attributes: str | float | None) -> str:
    """One element. `content` is markup already built here or by `plain`.

    Attribute names are written with underscores for hyphens and a trailing underscore where Python has a keyword
    (`class_`). Attributes that are None are left out. Raises ValueError for attributes the content security policy of
    the pages would refuse (style and event handlers).
    """
    parts = [name]
    for key, value in attributes.items():
        if value is None:
            continue
        attribute = key.rstrip("_").replace("_", "-")
        if not _ATTRIBUTE_NAME.match(attribute) or attribute == "style" or attribute.startswith("on"):
            raise ValueError(f"The attribute {attribute!r} may not stand in a figure.")
        attribute = _CASED.get(attribute, attribute)
        written = coordinate(value) if isinstance(value, (int, float)) else _NOT_XML.sub("", value)
        parts.append(f"{attribute}={quoteattr(written)}")
    opening = " ".join(parts)
    return f"<{opening}>{content}</{name}>" if content else f"<{opening}/>"


def coordinate(value: float) -> str:
    """A coordinate to a tenth of a unit: finer than any screen or printer shows, and a third of the bytes."""
    text = f"{value:.1f}"
    text = text.removesuffix(".0")
    return "0" if text == "-0" else text


def points(pairs: list[tuple[float, float]]) -> str:
    """Coordinates for a polyline or polygon."""
    return " ".join(f"{coordinate(x)},{coordinate(y)}" for x, y in pairs)


def document(
    content: str,
    *,
    width: float,
    height: float,
    ident: str,
    title: str,
    description: str,
    class_: str = "",
    note: str = "",
) -> str:
    """The `svg` element: an image to assistive technology, with a title and a description.

    `note` (that the data are invented, the moment shown) is a line below the drawing, for files that leave the page.

    `ident` makes the ids of one page differ. Direction is fixed left to right: time and numbers run that way on a
    right-to-left page too, and `text-anchor` would otherwise turn round.
    """
    if note:
        height += 20
        content += element("text", plain(shorten(note, width, 13)), x=0, y=height - 6, class_="note")
    named = element("title", plain(title), id=f"{ident}-title")
    described = element("desc", plain(description), id=f"{ident}-description")
    return element(
        "svg",
        named + described + content,
        xmlns="http://www.w3.org/2000/svg",
        viewbox=f"0 0 {coordinate(width)} {coordinate(height)}",
        class_=" ".join(part for part in ("figure", class_) if part),
        role="img",
        direction="ltr",
        aria_labelledby=f"{ident}-title {ident}-description",
    )


def shorten(text: str, room: float, size: float) -> str:
    """`text` cut with an ellipsis so that it fits `room` units at font size `size`.

    The width is an estimate (0.54 of the size for a letter, the whole size for wide East Asian ones), because a server
    has no font metrics; the full text belongs in the row's title and in the table.
    """
    used = 0.0
    for index, character in enumerate(text):
        used += size * (1.0 if unicodedata.east_asian_width(character) in "WF" else 0.54)
        if used > room and index < len(text):
            kept = text[: max(1, index - 1)].rstrip()
            return kept + "…"
    return text
