"""Reading an SVG back: parsed as XML, searched by class."""

from xml.etree import ElementTree

SVG = "{http://www.w3.org/2000/svg}"


def parse(figure: str) -> ElementTree.Element:
    """The root of a figure; raises ParseError when it is not well-formed XML."""
    return ElementTree.fromstring(figure)


def of_class(root: ElementTree.Element, name: str, tag: str | None = None) -> list[ElementTree.Element]:
    """Elements that carry the class, in drawing order; without those of the key above the drawing."""
    return [
        node for node in root.iter() if name in node.get("class", "").split() and (tag is None or node.tag == SVG + tag)
    ]


def number(node: ElementTree.Element, attribute: str) -> float:
    return float(node.attrib[attribute])


def corners(node: ElementTree.Element) -> list[tuple[float, float]]:
    """The points of a polygon or polyline."""
    return [tuple(map(float, pair.split(","))) for pair in node.attrib["points"].split()]  # type: ignore[misc]


def texts(root: ElementTree.Element) -> list[str]:
    return ["".join(node.itertext()) for node in root.iter(SVG + "text")]
