"""The forest plot: every estimate with its interval and its weight, grouped by paper, over the pooled effect.

The field's published conventions (Lewis & Clarke 2001, BMJ 322:1479): a square for each estimate whose area tells its
weight, a line for its interval, a diamond as wide as the interval of the pooled effect, a line at the value of no
difference. Below the diamond a bar shows the prediction interval. A whisker that leaves the axis ends in an arrow.
"""

from dataclasses import dataclass, replace
from itertools import groupby

from dashboard.figures.axes import ValueScale, labelled_ticks, value_scale, widened
from dashboard.figures.numbers import Measure, write_count, write_number
from dashboard.figures.scales import covering
from dashboard.figures.svg import document, element, plain, points, shorten
from dashboard.figures.tables import Cell, Column, Table


@dataclass(frozen=True)
class ForestRow:
    """One estimate. weight: its share of the pooled effect, 0 to 1. place: where in the paper it stands."""

    paper: str
    place: str
    value: float
    low: float
    high: float
    weight: float
    flags: tuple[str, ...] = ()


@dataclass(frozen=True)
class PooledRow:
    """The pooled effect; the prediction interval is None where there is none."""

    value: float
    low: float
    high: float
    prediction_low: float | None = None
    prediction_high: float | None = None


@dataclass(frozen=True)
class Forest:
    """Rows in the order they are drawn, those of one paper together. pooled is None where nothing was pooled.

    total: how many estimates the synthesis has, when `rows` is only a part of them.
    averaged: each row is the average of one paper's estimates; papers_in_all: of how many papers these are.
    """

    measure: Measure
    rows: tuple[ForestRow, ...]
    pooled: PooledRow | None
    level: float
    total: int | None = None
    averaged: bool = False
    papers_in_all: int | None = None

    def __post_init__(self) -> None:
        if not self.rows:
            raise ValueError("A forest plot has at least one row.")
        names = [name for name, _ in groupby(self.rows, key=lambda row: row.paper)]
        if len(names) != len(set(names)):
            raise ValueError("The rows of one paper stand together.")
        for row in self.rows:
            if not row.low <= row.value <= row.high:
                raise ValueError(f"The interval of {row.paper} does not hold its estimate.")
            if row.weight < 0:
                raise ValueError("A weight is not negative.")

    @property
    def papers(self) -> list[tuple[str, list[ForestRow]]]:
        return [(name, list(rows)) for name, rows in groupby(self.rows, key=lambda row: row.paper)]

    @property
    def title(self) -> str:
        return f"Forest plot: {self.measure.name}"

    @property
    def percent(self) -> str:
        return f"{self.level * 100:g}\N{NO-BREAK SPACE}%"

    @property
    def is_part(self) -> bool:
        return self.total is not None and self.total > len(self.rows)


@dataclass(frozen=True)
class _Sheet:
    """The room a layout gives to the parts of the figure. `stacked` puts words above the drawing of a row."""

    width: float
    labels: float
    start: float
    end: float
    row: float
    stacked: bool
    ticks: int


_WIDE = _Sheet(760, 232, 244, 604, 22, False, 5)
_NARROW = _Sheet(360, 360, 6, 354, 38, True, 4)
# Mean width of a character of a number at 13 units, in tabular figures.
_DIGIT = 6.9
_TOP = 10.0
_LARGEST_SQUARE = 13.0
_SMALLEST_SQUARE = 2.5


def forest_figure(forest: Forest, *, ident: str, narrow: bool = False, note: str = "") -> str:
    """The whole figure as SVG text; `narrow` is the layout for a phone. `ident` keeps ids on a page apart."""
    sheet = _NARROW if narrow else _with_room_for_numbers(forest)
    across = value_scale(forest.measure, _value_range(forest), sheet.start, sheet.end)
    heaviest = max(row.weight for row in forest.rows)
    drawn: list[str] = []
    y = _TOP
    for paper, rows in forest.papers:
        if len(rows) > 1:
            drawn.append(_heading(paper, len(rows), sheet, y))
            y += 22
        for row in rows:
            drawn.append(_row(forest, row, sheet, across, y, heaviest, alone=len(rows) == 1))
            y += sheet.row
    if forest.pooled is not None:
        y += 8
        drawn.append(element("line", x1=0, x2=sheet.width, y1=y, y2=y, class_="grid"))
        y += 4
        drawn.append(_pooled(forest, forest.pooled, sheet, across, y))
        y += sheet.row
        if forest.pooled.prediction_low is not None and forest.pooled.prediction_high is not None:
            drawn.append(
                _prediction(forest, forest.pooled.prediction_low, forest.pooled.prediction_high, sheet, across, y)
            )
            y += sheet.row
    foot = y + 4
    return document(
        _axis(forest, sheet, across, foot) + "".join(drawn),
        width=sheet.width,
        height=foot + (40 if forest.measure.unit_apart else 24),
        ident=ident,
        title=forest.title,
        description=forest_sentence(forest),
        class_="forest narrow" if narrow else "forest wide",
        note=note,
    )


def _with_room_for_numbers(forest: Forest) -> _Sheet:
    """The wide layout, its drawing as wide as the longest "+3.0 (0.6 to 5.5)" leaves room for."""
    longest = max(len(_numbers(forest.measure, row.value, row.low, row.high)) for row in forest.rows)
    return replace(_WIDE, end=min(_WIDE.end, _WIDE.width - longest * _DIGIT - 14))


def _numbers(measure: Measure, value: float, low: float, high: float) -> str:
    return f"{measure.write(value).removesuffix(measure.suffix)} ({measure.write_interval(low, high)})"


def forest_sentence(forest: Forest) -> str:
    """What the figure shows, in words."""
    measure = forest.measure
    counted = write_count(len(forest.papers), "paper")
    if forest.averaged:
        if forest.papers_in_all is not None and forest.papers_in_all > len(forest.rows):
            counted += f" of {forest.papers_in_all}, those with most weight"
    else:
        counted += f", {write_count(len(forest.rows), 'estimate')}"
        counted += f" of {forest.total}" if forest.is_part else ""
    noun = "average" if forest.averaged else "estimate"
    least = min(row.value for row in forest.rows)
    most = max(row.value for row in forest.rows)
    null = measure.null_in_words
    including = sum(row.low <= measure.null <= row.high for row in forest.rows)
    if len(forest.rows) == 1:
        found = f"the {noun} is {measure.write(least)}"
    else:
        found = f"the {noun}s run from {measure.write(least)} to {measure.write(most)}"
    tail = f"{including} of {len(forest.rows)} intervals include {null}"
    if forest.pooled is None:
        return f"{counted}: {found}, and {tail}. Nothing was pooled."
    pooled = forest.pooled
    return (
        f"{counted}: {found}, and {tail}. The pooled effect is {measure.write(pooled.value)}"
        f" ({measure.write_interval(pooled.low, pooled.high)})."
    )


def forest_table(forest: Forest) -> Table:
    """One row an estimate, then the pooled effect and the prediction interval: the data the figure is drawn from."""
    measure = forest.measure
    unit = f", {measure.unit}" if measure.unit else ""
    columns = (
        Column("paper", "Paper"),
        Column("place", "Where it stands"),
        Column("effect", f"Effect{unit}", numeric=True),
        Column("interval_low", f"{forest.percent} interval, low", numeric=True),
        Column("interval_high", "high", numeric=True),
        Column("weight", "Weight, %", numeric=True),
        Column("flags", "Remarks"),
    )
    rows: list[tuple[Cell, ...]] = []
    written: list[tuple[str, ...]] = []

    def add(paper: str, place: str, numbers: tuple[float | None, ...], weight: float | None, remarks: str) -> None:
        shown = [None if number is None else measure.shown(number) for number in numbers]
        texts = ["" if number is None else measure.write_bare(number) for number in numbers]
        share = "" if weight is None else write_number(weight * 100, 1)
        rows.append((paper, place, *shown, weight, remarks))
        written.append((paper, place, *texts, share, remarks))

    for row in forest.rows:
        add(row.paper, row.place, (row.value, row.low, row.high), row.weight, "; ".join(row.flags))
    if forest.pooled is not None:
        pooled = forest.pooled
        add("Pooled effect", "", (pooled.value, pooled.low, pooled.high), None, "")
        if pooled.prediction_low is not None and pooled.prediction_high is not None:
            add("One new setting", "", (None, pooled.prediction_low, pooled.prediction_high), None, "")
    return Table(forest.title, columns, tuple(rows), tuple(written))


def _value_range(forest: Forest) -> tuple[float, float]:
    """The pooled effect, the value of no difference and all but far-off estimates fit; long whiskers are cut.

    An estimate is far off when it lies more than three interquartile ranges outside the quartiles (Tukey 1977, the
    outer fence): one such number would squeeze all others into a line.
    """
    ratio = forest.measure.ratio
    values = sorted(row.value for row in forest.rows)
    if len(values) >= 8:
        lower, upper = values[len(values) // 4], values[(3 * len(values)) // 4]
        if ratio:
            fence = (upper / lower) ** 3
            values = [value for value in values if lower / fence <= value <= upper * fence]
        else:
            fence = 3 * (upper - lower)
            values = [value for value in values if lower - fence <= value <= upper + fence]
    core = [*values, forest.measure.null]
    if forest.pooled is not None:
        core += [forest.pooled.low, forest.pooled.high]
        core += [bound for bound in (forest.pooled.prediction_low, forest.pooled.prediction_high) if bound is not None]
    bounds = [bound for row in forest.rows for bound in (row.low, row.high)]
    return widened(forest.measure, covering(core, ratio=ratio, margin=0.04), bounds, 0.4)


def _axis(forest: Forest, sheet: _Sheet, across: ValueScale, foot: float) -> str:
    measure = forest.measure
    parts = []
    for tick, label in labelled_ticks(measure, across, sheet.ticks):
        x = across.at(tick)
        if abs(tick - measure.null) > 1e-12:
            parts.append(element("line", x1=x, x2=x, y1=4, y2=foot, class_="grid"))
        parts.append(element("text", plain(label), x=x, y=foot + 17, class_="axis", text_anchor="middle"))
    if measure.unit_apart:
        parts.append(element("text", plain(measure.unit), x=sheet.end, y=foot + 34, class_="axis", text_anchor="end"))
    null = across.at(measure.null)
    parts.append(element("line", x1=null, x2=null, y1=4, y2=foot, class_="null"))
    if forest.pooled is not None:
        x = across.at(forest.pooled.value)
        parts.append(element("line", x1=x, x2=x, y1=4, y2=foot, class_="pooled-line"))
    return "".join(parts)


def _heading(paper: str, count: int, sheet: _Sheet, y: float) -> str:
    counted = write_count(count, "estimate")
    room = (sheet.labels if not sheet.stacked else sheet.width) - len(counted) * 6.5 - 10
    label = element("title", plain(paper)) + plain(shorten(paper, room, 13))
    end = sheet.labels if not sheet.stacked else sheet.width
    return element("text", label, x=0, y=y + 15, class_="label paper-name") + element(
        "text", plain(counted), x=end, y=y + 15, class_="axis", text_anchor="end"
    )


def _row(
    forest: Forest,
    row: ForestRow,
    sheet: _Sheet,
    across: ValueScale,
    y: float,
    heaviest: float,
    *,
    alone: bool,
) -> str:
    measure = forest.measure
    indent = 0 if alone else 14
    words = row.paper if alone else row.place
    numbers = f"{measure.write(row.value)} ({measure.write_interval(row.low, row.high)})"
    short = _numbers(measure, row.value, row.low, row.high)
    full = ", ".join(part for part in (row.paper, row.place, numbers, *row.flags) if part)
    room = (sheet.labels if not sheet.stacked else sheet.width - len(short) * _DIGIT - 8) - indent
    middle = y + (28 if sheet.stacked else sheet.row / 2)
    baseline = y + 15
    size = _SMALLEST_SQUARE + (_LARGEST_SQUARE - _SMALLEST_SQUARE) * (
        (row.weight / heaviest) ** 0.5 if heaviest > 0 else 0.0
    )
    parts = [
        element("title", plain(full)),
        element("text", plain(shorten(words, room, 13)), x=indent, y=baseline, class_="label"),
        _whisker(row, across, middle),
    ]
    if across.low <= row.value <= across.high:
        x = across.at(row.value)
        parts.append(element("rect", x=x - size / 2, y=middle - size / 2, width=size, height=size, class_="estimate"))
    parts.append(element("text", plain(short), x=sheet.width, y=baseline, class_="label", text_anchor="end"))
    return element("g", "".join(parts), class_="row")


def _whisker(row: ForestRow, across: ValueScale, middle: float) -> str:
    """The interval; where it leaves the axis an arrow says that it goes on.

    An estimate that lies off the axis itself leaves only the arrow, which points to where it is.
    """
    left, right = across.clamp(row.low), across.clamp(row.high)
    parts = [element("line", x1=left, x2=right, y1=middle, y2=middle, class_="whisker")]
    if row.low < across.low:
        x = across.start
        parts.append(
            element(
                "polygon",
                points=points([(x - 5, middle), (x + 2, middle - 3.5), (x + 2, middle + 3.5)]),
                class_="arrow",
            )
        )
    if row.high > across.high:
        x = across.end
        parts.append(
            element(
                "polygon",
                points=points([(x + 5, middle), (x - 2, middle - 3.5), (x - 2, middle + 3.5)]),
                class_="arrow",
            )
        )
    return "".join(parts)


def _pooled(forest: Forest, pooled: PooledRow, sheet: _Sheet, across: ValueScale, y: float) -> str:
    measure = forest.measure
    middle = y + (28 if sheet.stacked else sheet.row / 2)
    diamond = [
        (across.at(pooled.low), middle),
        (across.at(pooled.value), middle - 7),
        (across.at(pooled.high), middle),
        (across.at(pooled.value), middle + 7),
    ]
    words = "Pooled effect" + (f", all {forest.total} estimates" if forest.is_part else "")
    numbers = _numbers(measure, pooled.value, pooled.low, pooled.high)
    return (
        element("text", plain(words), x=0, y=y + 15, class_="label paper-name")
        + element("polygon", points=points(diamond), class_="pooled")
        + element("text", plain(numbers), x=sheet.width, y=y + 15, class_="label paper-name", text_anchor="end")
    )


def _prediction(forest: Forest, low: float, high: float, sheet: _Sheet, across: ValueScale, y: float) -> str:
    middle = y + (28 if sheet.stacked else sheet.row / 2)
    left, right = across.at(low), across.at(high)
    return (
        element("text", "Where one new setting could lie", x=0, y=y + 15, class_="label")
        + element("rect", x=left, y=middle - 3, width=right - left, height=6, class_="prediction-bar")
        + element(
            "text",
            plain(f"({forest.measure.write_interval(low, high)})"),
            x=sheet.width,
            y=y + 15,
            class_="label",
            text_anchor="end",
        )
    )
