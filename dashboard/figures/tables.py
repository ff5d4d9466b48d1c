"""The data of a figure as a table: for the page beside the figure, and as CSV for a spreadsheet."""

import csv
import io
from collections.abc import Iterable
from dataclasses import dataclass

Cell = str | int | float | None

# A spreadsheet runs a text cell that starts with one of these as a formula (OWASP, "CSV Injection").
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n")


@dataclass(frozen=True)
class Column:
    """`name` heads the CSV column, `label` the column on the page."""

    name: str
    label: str
    numeric: bool = False


@dataclass(frozen=True)
class Table:
    """`rows` hold full-precision values; `written` the same rows as a reader sees them, cell for cell."""

    caption: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    written: tuple[tuple[str, ...], ...]

    def __post_init__(self) -> None:
        widths = {len(row) for row in (*self.rows, *self.written)} | {len(self.columns)}
        if len(widths) > 1 or len(self.rows) != len(self.written):
            raise ValueError("Every row of a table has one cell for each column.")

    @property
    def lines(self) -> list[list[tuple[str, bool]]]:
        """Written cells, each with whether it is a number (set right-aligned)."""
        return [
            [(cell, column.numeric) for cell, column in zip(row, self.columns, strict=True)] for row in self.written
        ]


def safe_cell(cell: Cell) -> Cell:
    """Text that a spreadsheet would take for a formula gets an apostrophe; numbers stay numbers."""
    if isinstance(cell, str) and cell.startswith(_FORMULA_STARTS):
        return "'" + cell
    return cell


def as_csv(table: Table, notes: Iterable[str] = ()) -> str:
    """RFC 4180 text. Floats keep every digit (shortest form that reads back equal); unknown cells are empty.

    Each note (for instance that the data are invented) fills a last column of its own on every row, so that it
    survives sorting and cutting and the file stays a plain table.
    """
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\r\n")
    kept = [safe_cell(note) for note in notes]
    names: list[Cell] = [column.name for column in table.columns]
    writer.writerow([*names, *(["note"] if kept else [])])
    for row in table.rows:
        cells: list[Cell] = [safe_cell(cell) for cell in row]
        writer.writerow([*cells, *([" ".join(str(note) for note in kept)] if kept else [])])
    return buffer.getvalue()
