"""What a protocol has worked out beside the answer, as sections of the question page."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from analysis.answers import AnswerView
from dashboard.drawings import measure_of, shown_by
from dashboard.figures.numbers import Measure, write_number
from dashboard.figures.tables import Cell, Column, Table

_NOT_GIVEN = "not given"


@dataclass(frozen=True)
class Section:
    """One analysis: its reading in words, its table, and its cautions; or the reason why there is none."""

    code: str
    title: str
    reading: str
    table: Table | None
    flags: tuple[str, ...]
    reason: str | None


def sections_of(answer: AnswerView) -> list[Section]:
    """The findings of an answer's synthesis, in the order of the registry."""
    findings = answer.result.get("further", [])
    if not findings:
        return []
    measure, show = measure_of(answer), shown_by(answer)
    return [
        Section(
            code=finding["code"],
            title=finding["title"],
            reading=finding["reading"],
            table=_table(finding, measure, show) if finding["rows"] else None,
            flags=tuple(finding["flags"]),
            reason=finding["reason"],
        )
        for finding in findings
    ]


def _table(finding: dict[str, Any], measure: Measure, show: Callable[[float], float]) -> Table:
    unit = f", {measure.unit}" if measure.unit else ""
    kinds = [column["kind"] for column in finding["columns"]]
    columns = tuple(
        Column(column["name"], column["label"] + (unit if column["name"] == "value" else ""), column["kind"] != "text")
        for column in finding["columns"]
    )
    rows: list[tuple[Cell, ...]] = []
    written: list[tuple[str, ...]] = []
    for row in finding["rows"]:
        shown = [
            show(cell) if kind == "effect" and cell is not None else cell for kind, cell in zip(kinds, row, strict=True)
        ]
        rows.append(tuple(shown))
        written.append(tuple(_written(kind, cell, measure) for kind, cell in zip(kinds, shown, strict=True)))
    return Table(finding["title"], columns, tuple(rows), tuple(written))


def _written(kind: str, cell: Cell, measure: Measure) -> str:
    if cell is None:
        return _NOT_GIVEN
    if isinstance(cell, str) or kind == "count":
        return str(cell)
    if kind == "effect":
        return measure.write_bare(cell)
    if kind == "p":
        return "below 0.001" if cell < 0.001 else write_number(cell, 3)
    return write_number(cell, 3)
