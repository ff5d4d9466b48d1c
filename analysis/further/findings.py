"""The shape of what a further analysis finds."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

Cell = str | float | int | None

TEXT, EFFECT, NUMBER, COUNT, P_VALUE = "text", "effect", "number", "count", "p"
"""Kinds of column. An effect is in the metric of the answer, and is shown on the scale people read."""


@dataclass(frozen=True)
class Column:
    """``name`` for programs, ``label`` for people, ``kind`` as above."""

    name: str
    label: str
    kind: str


@dataclass(frozen=True)
class Finding:
    """A reading in plain words and the table behind it; or ``reason``, and then neither.

    A cell is None where a number is not estimable. ``flags`` are sentences.
    """

    title: str
    reading: str = ""
    columns: Sequence[Column] = ()
    rows: Sequence[Sequence[Cell]] = ()
    flags: Sequence[str] = ()
    reason: str | None = None

    def as_json(self) -> dict[str, Any]:
        return {
            "title": self.title,
            "reading": self.reading,
            "columns": [{"name": c.name, "label": c.label, "kind": c.kind} for c in self.columns],
            "rows": [list(row) for row in self.rows],
            "flags": list(self.flags),
            "reason": self.reason,
        }
