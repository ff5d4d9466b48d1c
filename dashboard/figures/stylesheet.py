"""A figure as a file of its own: the rules that colour it travel inside it.

On a page the figure is coloured by `figures.css` with the variables of `steelyard.css`. A drawing program knows neither
the page nor CSS variables, so a downloaded file carries the same rules with the light values written out.
"""

import re
from functools import cache
from pathlib import Path
from xml.sax.saxutils import escape

_STATIC = Path(__file__).resolve().parent.parent / "static" / "dashboard"
_ROOT_BLOCK = re.compile(r":root\s*\{(.*?)\}", re.DOTALL)
_VARIABLE = re.compile(r"(--[a-z-]+)\s*:\s*([^;]+);")
_USE = re.compile(r"var\((--[a-z-]+)\)")
_BOX = re.compile(r'viewBox="0 0 ([0-9.]+) ([0-9.]+)"')
_COMMENT = re.compile(r"/\*.*?\*/", re.DOTALL)


@cache
def figure_rules() -> str:
    """The rules of `figures.css` with every variable replaced by its value for paper.

    Raises KeyError when a rule uses a variable that the first `:root` block does not define.
    """
    page = _COMMENT.sub("", (_STATIC / "steelyard.css").read_text(encoding="utf-8"))
    block = _ROOT_BLOCK.search(page)
    values = dict(_VARIABLE.findall(block.group(1))) if block else {}
    rules = _COMMENT.sub("", (_STATIC / "figures.css").read_text(encoding="utf-8"))
    # What follows the marker is about the page around a figure, not about the figure.
    rules = rules.partition("@media")[0]
    resolved = _USE.sub(lambda use: values[use.group(1)].strip(), rules)
    return re.sub(r"\s+", " ", resolved).strip()


def standalone(figure: str) -> str:
    """`figure` as a complete SVG file: its stylesheet inside, its natural size stated for programs that need one."""
    opening, _, rest = figure.partition(">")
    box = _BOX.search(opening)
    size = f' width="{box.group(1)}" height="{box.group(2)}"' if box else ""
    # "<" would end the style element's text in XML; no CSS of ours needs one.
    style = f"<style>{escape(figure_rules())}</style>"
    return f'<?xml version="1.0" encoding="UTF-8"?>\n{opening}{size}>{style}{rest}\n'
