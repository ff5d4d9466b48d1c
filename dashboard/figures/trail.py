"""The trail: where the pooled effect stood after each arrival, and how sure it was.

Time runs along the foot. The line is the pooled effect and moves only in steps, because it changes only when papers
enter. The dark band is the interval of the average, the pale one the prediction interval: where the effect in one new
setting could lie. On the rail below, each paper is a tick whose height tells its precision. Nothing in the drawing says
that up is good: which direction is good belongs to the question, and the words say it.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import date
from itertools import pairwise
from textwrap import wrap

from dashboard.figures.axes import ValueScale, labelled_ticks, value_scale, widened
from dashboard.figures.numbers import Measure, write_count, write_published
from dashboard.figures.scales import LinearScale, covering, date_ticks
from dashboard.figures.svg import document, element, plain, points, shorten
from dashboard.figures.tables import Cell, Column, Table


@dataclass(frozen=True)
class PaperMark:
    """A paper on the rail. precision: 1 / standard error of its most precise estimate, or None when unknown."""

    label: str
    precision: float | None


@dataclass(frozen=True)
class TrailStep:
    """The answer from `on` until the next step. value is None where no answer could be given (`reason` says why).

    papers: those that entered at this step. n_papers, n_estimates: in the answer from this step on.
    known_as: the date as far as it is known, for words ("2019", "2019-05"); empty when the day itself is.
    """

    on: date
    papers: tuple[PaperMark, ...]
    n_papers: int
    n_estimates: int
    value: float | None
    low: float | None = None
    high: float | None = None
    prediction_low: float | None = None
    prediction_high: float | None = None
    reason: str = ""
    known_as: str = ""

    @property
    def date(self) -> str:
        """The date in words, claiming no more than is known."""
        return write_published(self.known_as or self.on.isoformat())

    @property
    def dated(self) -> str:
        """The date with its preposition: "in 2019", "on 3 May 2019"."""
        return f"{'on' if len(self.known_as or self.on.isoformat()) == 10 else 'in'} {self.date}"


@dataclass(frozen=True)
class Trail:
    """All steps, oldest first, at most one a date; `until` is the day to which the last answer is drawn."""

    measure: Measure
    steps: tuple[TrailStep, ...]
    level: float
    until: date
    clock: str = "date of publication"

    def __post_init__(self) -> None:
        if not self.steps:
            raise ValueError("A trail has at least one step.")
        days = [step.on for step in self.steps]
        if any(later <= earlier for earlier, later in pairwise(days)):
            raise ValueError("The steps of a trail follow one another in time.")
        if self.until < days[-1]:
            raise ValueError("A trail cannot end before its last step.")

    @property
    def percent(self) -> str:
        return f"{self.level * 100:g}\N{NO-BREAK SPACE}%"

    @property
    def last(self) -> TrailStep:
        return self.steps[-1]

    @property
    def title(self) -> str:
        return f"Trail of the pooled effect: {self.measure.name}"


@dataclass(frozen=True)
class _Sheet:
    """The room a layout gives to the parts of the figure, in SVG units."""

    width: float
    height: float
    left: float
    right: float
    top: float
    bottom: float
    rail: float
    years: int
    end_label: bool


_WIDE = _Sheet(760, 320, 58, 668, 34, 262, 282, 8, True)
_NARROW = _Sheet(360, 320, 48, 346, 74, 262, 282, 4, False)
_TICK_HEIGHT = 14.0


def trail_figure(trail: Trail, *, ident: str, narrow: bool = False, note: str = "") -> str:
    """The whole figure as SVG text; `narrow` is the layout for a phone. `ident` keeps ids on a page apart."""
    sheet = _NARROW if narrow else _WIDE
    up = value_scale(trail.measure, _value_range(trail), sheet.bottom, sheet.top)
    # The labels of the axis need their room whatever the size of the numbers.
    longest = max(len(label) for _, label in labelled_ticks(trail.measure, up))
    sheet = replace(sheet, left=max(sheet.left, 7.2 * longest + 12))
    across = _time_scale(trail, sheet)
    parts = [
        _value_axis(trail, sheet, up),
        _time_axis(trail, sheet, across),
        _bands(trail, across, up),
        _lines(trail, across, up),
        _rail(trail, sheet, across),
        _end(trail, sheet, across, up),
        _key(trail, sheet),
        _readings(trail, sheet, across),
    ]
    return document(
        "".join(parts),
        width=sheet.width,
        height=sheet.height,
        ident=ident,
        title=trail.title,
        description=trail_sentence(trail),
        class_="trail narrow" if narrow else "trail wide",
        note=note,
    )


def small_trail_figure(trail: Trail, *, ident: str) -> str:
    """The trail without words, to stand beside a sentence: line, band, the value of no difference, the end."""
    sheet = _Sheet(220, 52, 2, 212, 3, 49, 49, 0, False)
    across = _time_scale(trail, sheet)
    up = value_scale(trail.measure, _value_range(trail), sheet.bottom, sheet.top)
    null = up.at(trail.measure.null)
    parts = [
        element("line", x1=sheet.left, x2=sheet.right, y1=null, y2=null, class_="null"),
        *_band_polygons(trail, across, up, "low", "high", "band"),
        _lines(trail, across, up),
    ]
    if trail.last.value is not None:
        parts.append(
            element("circle", cx=across.at(trail.until.toordinal()), cy=up.at(trail.last.value), r=3, class_="dot")
        )
    return document(
        "".join(parts),
        width=sheet.width,
        height=sheet.height,
        ident=ident,
        title=trail.title,
        description=trail_sentence(trail),
        class_="trail small",
    )


def trail_sentence(trail: Trail) -> str:
    """What the figure shows, in words, for the page above it and for those who do not see it."""
    measure, last = trail.measure, trail.last
    counted = write_count(last.n_papers, "paper")
    if last.value is None:
        return f"After {counted} there is no pooled effect" + (f": {last.reason}." if last.reason else ".")
    stands = f"After {counted} the pooled effect stands at {measure.write(last.value)}"
    if last.low is None or last.high is None:
        return stands + "; no interval could be given."
    stands += f" ({measure.write_interval(last.low, last.high)})"
    answered = [step for step in trail.steps if step.value is not None]
    if len(answered) == 1:
        return f"{stands}; this is its first value, from {last.date}."
    first = answered[0]
    null = measure.null_in_words
    side = _side(last, measure.null)
    if side == 0:
        verdict = f"its interval includes {null}"
    else:
        since = last
        for step in reversed(answered):
            if _side(step, measure.null) != side:
                break
            since = step
        where = "above" if side > 0 else "below"
        verdict = f"its whole interval has been {where} {null} since {since.date}"
    began = f"it began at {measure.write(first.value or 0.0)} {first.dated}"
    return f"{stands}; {began}, and {verdict}."


def trail_table(trail: Trail) -> Table:
    """One row a step: the data the figure is drawn from."""
    measure = trail.measure
    unit = f", {measure.unit}" if measure.unit else ""
    columns = (
        Column("date", "From"),
        Column("papers_entering", "Papers that entered"),
        Column("papers", "Papers", numeric=True),
        Column("estimates", "Estimates", numeric=True),
        Column("pooled_effect", f"Pooled effect{unit}", numeric=True),
        Column("interval_low", f"{trail.percent} interval, low", numeric=True),
        Column("interval_high", "high", numeric=True),
        Column("prediction_low", "One new setting, low", numeric=True),
        Column("prediction_high", "high", numeric=True),
    )
    rows: list[tuple[Cell, ...]] = []
    written: list[tuple[str, ...]] = []
    for step in trail.steps:
        numbers = (step.value, step.low, step.high, step.prediction_low, step.prediction_high)
        names = "; ".join(paper.label for paper in step.papers)
        shown = [None if number is None else measure.shown(number) for number in numbers]
        rows.append((step.on.isoformat(), names, step.n_papers, step.n_estimates, *shown))
        texts = ["not given" if number is None else measure.write_bare(number) for number in numbers]
        if step.value is None and step.reason:
            texts[0] = step.reason
        written.append((step.date, names, str(step.n_papers), str(step.n_estimates), *texts))
    caption = f"{trail.title}, by {trail.clock}"
    return Table(caption, columns, tuple(rows), tuple(written))


def clipped(trail: Trail) -> bool:
    """Whether some band is wider than the figure, so that a caption can say so."""
    low, high = _value_range(trail)
    return any(bound < low or bound > high for bound in _bounds(trail))


def _bounds(trail: Trail) -> list[float]:
    """Every known end of a band."""
    return [
        bound
        for step in trail.steps
        for bound in (step.low, step.high, step.prediction_low, step.prediction_high)
        if bound is not None
    ]


def _side(step: TrailStep, null: float) -> int:
    """+1 when the whole interval is above `null`, -1 when below, 0 when it includes it or there is none."""
    if step.low is None or step.high is None:
        return 0
    return int(step.low > null) - int(step.high < null)


def _time_scale(trail: Trail, sheet: _Sheet) -> LinearScale:
    first, last = trail.steps[0].on.toordinal(), trail.until.toordinal()
    if first == last:
        # A trail of one day: the step stands in the middle of a year.
        return LinearScale(first - 183, last + 183, sheet.left, sheet.right)
    lead = max(1, round((last - first) * 0.03)) if sheet.years else 0
    return LinearScale(first - lead, last, sheet.left, sheet.right)


def _value_range(trail: Trail) -> tuple[float, float]:
    """Every pooled effect and the whole present interval and prediction fit; early bands may be cut.

    With one or two papers a band can be a hundred times wider than today's and would flatten the rest of the story.
    """
    last = trail.last
    core = [step.value for step in trail.steps if step.value is not None]
    core += [bound for bound in (last.low, last.high, last.prediction_low, last.prediction_high) if bound is not None]
    core.append(trail.measure.null)
    bounds = _bounds(trail)
    return widened(trail.measure, covering(core, ratio=trail.measure.ratio), bounds, 0.35)


def _value_axis(trail: Trail, sheet: _Sheet, up: ValueScale) -> str:
    parts = []
    for tick, label in labelled_ticks(trail.measure, up):
        y = up.at(tick)
        class_ = "null" if abs(tick - trail.measure.null) < 1e-12 else "grid"
        parts.append(element("line", x1=sheet.left, x2=sheet.right, y1=y, y2=y, class_=class_))
        parts.append(element("text", plain(label), x=sheet.left - 8, y=y + 4, class_="axis", text_anchor="end"))
    return "".join(parts)


def _time_axis(trail: Trail, sheet: _Sheet, across: LinearScale) -> str:
    first, last = date.fromordinal(round(across.low)), date.fromordinal(round(across.high))
    parts = [element("line", x1=sheet.left, x2=sheet.right, y1=sheet.rail, y2=sheet.rail, class_="grid")]
    for day, label in date_ticks(first, last, sheet.years):
        x = across.at(day.toordinal())
        parts.append(element("line", x1=x, x2=x, y1=sheet.rail, y2=sheet.rail + 4, class_="grid"))
        parts.append(element("text", plain(label), x=x, y=sheet.rail + 18, class_="axis", text_anchor="middle"))
    return "".join(parts)


def _spans(trail: Trail, across: LinearScale) -> list[tuple[TrailStep, float, float]]:
    """Each step with the coordinates at which it begins and ends."""
    days = [step.on for step in trail.steps] + [trail.until]
    ends = [across.at(day.toordinal()) for day in days]
    return [(step, ends[index], ends[index + 1]) for index, step in enumerate(trail.steps)]


def _runs(trail: Trail, across: LinearScale, *fields: str) -> list[list[tuple[TrailStep, float, float]]]:
    """Neighbouring steps in which none of `fields` is unknown: a gap in what is known is a gap in the drawing."""
    runs: list[list[tuple[TrailStep, float, float]]] = [[]]
    for span in _spans(trail, across):
        if any(getattr(span[0], field) is None for field in fields):
            if runs[-1]:
                runs.append([])
        else:
            runs[-1].append(span)
    return [run for run in runs if run]


def _band_polygons(trail: Trail, across: LinearScale, up: ValueScale, low: str, high: str, class_: str) -> list[str]:
    polygons = []
    for run in _runs(trail, across, low, high):
        upper: list[tuple[float, float]] = []
        lower: list[tuple[float, float]] = []
        for step, begin, end in run:
            # A step that begins on the last day has no width of its own; a sliver keeps its interval visible.
            finish = max(end, begin + 3)
            upper += [(begin, up.clamp(getattr(step, high))), (finish, up.clamp(getattr(step, high)))]
            lower += [(begin, up.clamp(getattr(step, low))), (finish, up.clamp(getattr(step, low)))]
        polygons.append(element("polygon", points=points(upper + lower[::-1]), class_=class_))
    return polygons


def _bands(trail: Trail, across: LinearScale, up: ValueScale) -> str:
    prediction = _band_polygons(trail, across, up, "prediction_low", "prediction_high", "prediction")
    interval = _band_polygons(trail, across, up, "low", "high", "band")
    return "".join(prediction + interval)


def _lines(trail: Trail, across: LinearScale, up: ValueScale) -> str:
    lines = []
    for run in _runs(trail, across, "value"):
        path: list[tuple[float, float]] = []
        for step, begin, end in run:
            y = up.at(step.value if step.value is not None else trail.measure.null)
            path += [(begin, y), (end, y)]
        lines.append(element("polyline", points=points(path), class_="line"))
    return "".join(lines)


def _rail(trail: Trail, sheet: _Sheet, across: LinearScale) -> str:
    known = [paper.precision for step in trail.steps for paper in step.papers if paper.precision is not None]
    most = max(known, default=1.0)
    parts = []
    for step in trail.steps:
        x = across.at(step.on.toordinal())
        for paper in step.papers:
            height = 3 + (_TICK_HEIGHT - 3) * (paper.precision / most if paper.precision is not None else 0)
            label = f"{paper.label}, {step.date}"
            # Papers of one day share a place; their ticks stand over one another and the tallest shows.
            parts.append(
                element(
                    "line",
                    element("title", plain(label)),
                    x1=x,
                    x2=x,
                    y1=sheet.rail,
                    y2=sheet.rail - height,
                    class_="paper",
                )
            )
    return "".join(parts)


def _end(trail: Trail, sheet: _Sheet, across: LinearScale, up: ValueScale) -> str:
    last = trail.last
    if last.value is None:
        return ""
    x, y = across.at(trail.until.toordinal()), up.at(last.value)
    parts = [element("circle", cx=x, cy=y, r=4, class_="dot")]
    value = plain(trail.measure.write_compact(last.value))
    interval = (
        plain(trail.measure.write_interval(last.low, last.high))
        if last.low is not None and last.high is not None
        else ""
    )
    apart = trail.measure.unit_apart
    if sheet.end_label:
        if apart:
            for number, line in enumerate(wrap(apart, 13)[:3]):
                text = plain(shorten(line, sheet.width - sheet.right, 12))
                parts.append(element("text", text, x=sheet.right + 10, y=y + 37 + 15 * number, class_="axis"))
        parts.append(element("text", value, x=sheet.right + 10, y=y + 5, class_="now"))
        if interval:
            parts.append(element("text", interval, x=sheet.right + 10, y=y + 21, class_="axis"))
    else:
        rest = " ".join(part for part in (interval, plain(apart)) if part)
        shown = element("tspan", value, class_="now") + (element("tspan", " " + rest) if rest else "")
        parts.append(element("text", shown, x=sheet.right, y=16, class_="axis", text_anchor="end"))
    return "".join(parts)


def _key(trail: Trail, sheet: _Sheet) -> str:
    """What the bands and ticks are, said above the drawing where nothing can lie beneath the words."""
    has_prediction = any(step.prediction_low is not None for step in trail.steps)
    entries = [("band", f"{trail.percent} interval of the average")]
    if has_prediction:
        entries.append(("prediction", "where one new setting could lie"))
    entries.append(("paper", "a paper; taller is more precise"))
    parts = []
    x, y = sheet.left, 16.0 if sheet.end_label else 32.0
    for class_, words in entries:
        if class_ == "paper":
            parts.append(element("line", x1=x + 6, x2=x + 6, y1=y, y2=y - 11, class_="paper"))
        else:
            parts.append(element("rect", x=x, y=y - 10, width=12, height=11, class_=class_))
        parts.append(element("text", plain(words), x=x + 18, y=y, class_="note"))
        if sheet.end_label:
            x += 40 + len(words) * 5.9
        else:
            y += 17
    return "".join(parts)


def _readings(trail: Trail, sheet: _Sheet, across: LinearScale) -> str:
    """An unseen column over each step whose title a pointer can read."""
    parts = []
    for step, begin, end in _spans(trail, across):
        parts.append(
            element(
                "rect",
                element("title", plain(_reading(trail, step))),
                x=begin,
                y=sheet.top,
                width=max(end - begin, 2),
                height=sheet.bottom - sheet.top,
                class_="reading",
            )
        )
    return "".join(parts)


def _reading(trail: Trail, step: TrailStep) -> str:
    papers = write_count(step.n_papers, "paper")
    if step.value is None:
        return f"From {step.date}: no pooled effect, {papers}"
    text = f"From {step.date}: {trail.measure.write(step.value)}"
    if step.low is not None and step.high is not None:
        text += f" ({trail.measure.write_interval(step.low, step.high)})"
    return f"{text}, {papers}"


def later_of(days: Sequence[date], today: date) -> date:
    """The day to which a trail is drawn: today, or a publication date that lies ahead of it."""
    return max([*days, today], default=today)


def one_step_a_day(steps: Sequence[TrailStep]) -> tuple[TrailStep, ...]:
    """Steps that share a date become one: its answer is the last, its papers are all that entered."""
    merged: list[TrailStep] = []
    for step in steps:
        if merged and merged[-1].on == step.on:
            merged[-1] = replace(step, papers=merged[-1].papers + step.papers)
        else:
            merged.append(step)
    return tuple(merged)
