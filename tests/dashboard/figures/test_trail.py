"""The trail: what stands where. The numbers are invented; the expected coordinates follow from the figure's own scales,
read back from its axis, so a test compares two independent readings of one drawing."""

from dataclasses import replace
from datetime import date

import pytest

from dashboard.figures.numbers import Measure
from dashboard.figures.trail import (
    PaperMark,
    Trail,
    TrailStep,
    clipped,
    later_of,
    one_step_a_day,
    small_trail_figure,
    trail_figure,
    trail_sentence,
    trail_table,
)

from .drawn import corners, number, of_class, parse, texts

REVENUE = Measure("farm-gate revenue", "%", 1)
RISK = Measure("diarrhoea", "", 2, 1.0, True)


def _step(year: int, value: float | None, half: float = 1.0, papers: int = 1, **more: object) -> TrailStep:
    bounds = {} if value is None else {"low": value - half, "high": value + half}
    marks = tuple(PaperMark(f"Paper {year}-{index}", 1.0 / (index + 1)) for index in range(papers))
    return TrailStep(date(year, 1, 1), marks, year - 2009, 2 * (year - 2009), value, **bounds, **more)  # type: ignore[arg-type]


STEPS = (
    _step(2010, None, reason="one paper cannot say how far papers differ"),
    _step(2012, 2.0, 3.0),
    _step(2015, 5.0, 2.0, 2, prediction_low=-1.0, prediction_high=9.0),
    _step(2020, 4.0, 1.0, 1, prediction_low=0.5, prediction_high=7.5),
)
TRAIL = Trail(REVENUE, STEPS, 0.95, date(2024, 1, 1))


def _height_of(root, label: str) -> float:
    """Where the axis has a label, by its grid line."""
    lines = [*of_class(root, "grid", "line"), *of_class(root, "null", "line")]
    (text,) = [node for node in root.iter() if "".join(node.itertext()) == label and node.get("class") == "axis"]
    return min((number(line, "y1") for line in lines), key=lambda y: abs(y + 4 - number(text, "y")))


@pytest.mark.parametrize("narrow", [False, True])
def test_the_line_has_two_points_a_step_and_the_band_follows(narrow):
    root = parse(trail_figure(TRAIL, ident="t", narrow=narrow))
    (line,) = of_class(root, "line", "polyline")
    points = corners(line)
    assert len(points) == 2 * 3  # three steps have an answer
    assert [x for x, _ in points[1:-1:2]] == [x for x, _ in points[2::2]]  # vertical moves between steps
    (band,) = of_class(root, "band", "polygon")
    assert len(corners(band)) == 4 * 3


def test_heights_agree_with_the_axis():
    root = parse(trail_figure(TRAIL, ident="t"))
    zero, four = _height_of(root, "0\N{NO-BREAK SPACE}%"), _height_of(root, "+4\N{NO-BREAK SPACE}%")
    unit = (zero - four) / 4
    (line,) = of_class(root, "line", "polyline")
    heights = [y for _, y in corners(line)][::2]
    # A tenth of a unit is the precision of a coordinate; three of them meet here.
    assert [(zero - y) / unit for y in heights] == pytest.approx([2.0, 5.0, 4.0], abs=0.02)
    (band,) = of_class(root, "band", "polygon")
    upper = [y for _, y in corners(band)][: 2 * 3][::2]
    assert [(zero - y) / unit for y in upper] == pytest.approx([5.0, 7.0, 5.0], abs=0.02)


def test_the_prediction_band_begins_where_it_is_known():
    root = parse(trail_figure(TRAIL, ident="t"))
    (prediction,) = of_class(root, "prediction", "polygon")
    (band,) = of_class(root, "band", "polygon")
    assert len(corners(prediction)) == 4 * 2
    assert min(x for x, _ in corners(prediction)) > min(x for x, _ in corners(band))


def test_every_paper_is_a_tick_whose_height_tells_its_precision():
    root = parse(trail_figure(TRAIL, ident="t"))
    ticks = [line for line in of_class(root, "paper", "line") if len(line)]  # the key's own tick has no title
    assert len(ticks) == 5
    height = {line[0].text: number(line, "y1") - number(line, "y2") for line in ticks}
    assert height["Paper 2015-0, 1 January 2015"] == 14  # the most precise fills the rail
    assert height["Paper 2015-1, 1 January 2015"] == pytest.approx(3 + 11 / 2)


def test_the_end_says_where_the_answer_stands():
    words = texts(parse(trail_figure(TRAIL, ident="t")))
    assert "+4.0\N{NO-BREAK SPACE}%" in words
    assert "3.0 to 5.0" in words


def test_a_gap_in_what_is_known_is_a_gap_in_the_line():
    steps = (_step(2010, 1.0), _step(2012, None, reason="nothing left"), _step(2014, 2.0))
    root = parse(trail_figure(Trail(REVENUE, steps, 0.95, date(2015, 1, 1)), ident="t"))
    assert len(of_class(root, "line", "polyline")) == 2
    assert len(of_class(root, "band", "polygon")) == 2


def test_one_step_on_its_own_day_can_be_drawn_and_seen():
    one = Trail(REVENUE, (_step(2020, 2.0),), 0.95, date(2020, 1, 1))
    for figure in (
        trail_figure(one, ident="a"),
        trail_figure(one, ident="b", narrow=True),
        small_trail_figure(one, ident="c"),
    ):
        (band,) = of_class(parse(figure), "band", "polygon")
        across = [x for x, _ in corners(band)]
        assert max(across) - min(across) >= 3
    assert trail_sentence(one) == (
        "After 11\N{NO-BREAK SPACE}papers the pooled effect stands at +2.0\N{NO-BREAK SPACE}% (1.0 to 3.0);"
        " this is its first value, from 1 January 2020."
    )


def test_without_any_answer_the_figure_and_the_words_say_so():
    none = Trail(REVENUE, (_step(2010, None, reason="no estimate has a standard error"),), 0.95, date(2011, 1, 1))
    root = parse(trail_figure(none, ident="t"))
    assert of_class(root, "line", "polyline") == []
    assert of_class(root, "dot") == []
    assert trail_sentence(none) == (
        "After 1\N{NO-BREAK SPACE}paper there is no pooled effect: no estimate has a standard error."
    )


def test_early_bands_are_cut_at_the_edge_but_the_line_never_is():
    steps = (_step(2010, 9.0, 400.0), _step(2012, 5.0, 2.0), _step(2014, 4.0, 1.0))
    trail = Trail(REVENUE, steps, 0.95, date(2016, 1, 1))
    assert clipped(trail)
    assert not clipped(TRAIL)
    root = parse(trail_figure(trail, ident="t"))
    (reading, *_) = of_class(root, "reading")
    top, bottom = number(reading, "y"), number(reading, "y") + number(reading, "height")
    (band,), (line,) = of_class(root, "band", "polygon"), of_class(root, "line", "polyline")
    assert all(top <= y <= bottom for _, y in corners(band))
    assert all(top < y < bottom for _, y in corners(line))


def test_ratios_are_drawn_on_logarithms_around_one():
    steps = (replace(_step(2010, 0.5), low=0.25, high=1.0), replace(_step(2012, 2.0), low=1.0, high=4.0))
    root = parse(trail_figure(Trail(RISK, steps, 0.95, date(2014, 1, 1)), ident="t"))
    (null,) = of_class(root, "null", "line")
    heights = [y for _, y in corners(of_class(root, "line", "polyline")[0])]
    assert heights[0] - number(null, "y1") == pytest.approx(number(null, "y1") - heights[-1], abs=0.2)


def test_the_sentence_says_since_when_the_interval_is_clear_of_zero():
    assert trail_sentence(TRAIL) == (
        "After 11\N{NO-BREAK SPACE}papers the pooled effect stands at +4.0\N{NO-BREAK SPACE}% (3.0 to 5.0);"
        " it began at +2.0\N{NO-BREAK SPACE}% on 1 January 2012, and its whole interval has been above zero"
        " since 1 January 2015."
    )
    wavering = replace(TRAIL, steps=(*STEPS, _step(2022, 0.5, 1.0)))
    assert trail_sentence(wavering).endswith("and its interval includes zero.")
    protective = Trail(
        RISK,
        (replace(_step(2010, 0.9), low=0.6, high=1.2), replace(_step(2012, 0.8), low=0.7, high=0.9)),
        0.95,
        date(2013, 1, 1),
    )
    assert trail_sentence(protective).endswith("has been below 1.00 since 1 January 2012.")


def test_the_table_holds_exactly_what_is_drawn():
    table = trail_table(TRAIL)
    assert [row[:4] for row in table.rows] == [
        ("2010-01-01", "Paper 2010-0", 1, 2),
        ("2012-01-01", "Paper 2012-0", 3, 6),
        ("2015-01-01", "Paper 2015-0; Paper 2015-1", 6, 12),
        ("2020-01-01", "Paper 2020-0", 11, 22),
    ]
    assert [row[4:] for row in table.rows] == [
        (None, None, None, None, None),
        (2.0, -1.0, 5.0, None, None),
        (5.0, 3.0, 7.0, -1.0, 9.0),
        (4.0, 3.0, 5.0, 0.5, 7.5),
    ]
    assert table.written[0][4] == "one paper cannot say how far papers differ"
    assert table.written[2][5:] == ("3.0", "7.0", "−1.0", "9.0")


def test_hostile_labels_are_text_and_nothing_else():
    label = "<script>alert(1)</script>\"'&]]>\x00\x07"
    step = replace(STEPS[1], papers=(PaperMark(label, 1.0),))
    trail = Trail(Measure(label, "%", 1), (step,), 0.95, date(2020, 1, 1))
    root = parse(trail_figure(trail, ident="t"))
    assert [node.tag for node in root.iter() if node.tag.endswith("script")] == []
    titles = [line[0].text for line in of_class(root, "paper", "line") if len(line)]
    assert titles == ["<script>alert(1)</script>\"'&]]>, 1 January 2012"]


def test_figures_carry_no_style_attribute_and_no_handler():
    for figure in (trail_figure(TRAIL, ident="a"), small_trail_figure(TRAIL, ident="b")):
        names = {name for node in parse(figure).iter() for name in node.attrib}
        assert not {name for name in names if name == "style" or name.startswith("on")}


def test_ids_differ_between_figures_of_one_page():
    ids = [
        node.attrib["id"]
        for figure in (trail_figure(TRAIL, ident="a"), trail_figure(TRAIL, ident="b", narrow=True))
        for node in parse(figure).iter()
        if "id" in node.attrib
    ]
    assert len(ids) == len(set(ids))


def test_steps_out_of_order_are_refused():
    with pytest.raises(ValueError, match="follow one another"):
        Trail(REVENUE, STEPS[::-1], 0.95, date(2024, 1, 1))
    with pytest.raises(ValueError, match="at least one step"):
        Trail(REVENUE, (), 0.95, date(2024, 1, 1))
    with pytest.raises(ValueError, match="end before"):
        Trail(REVENUE, STEPS, 0.95, date(2019, 1, 1))


def test_steps_of_one_day_become_one_with_all_its_papers():
    same = replace(STEPS[3], on=STEPS[2].on)
    (merged,) = one_step_a_day([STEPS[2], same])
    assert merged.value == 4.0
    assert [paper.label for paper in merged.papers] == ["Paper 2015-0", "Paper 2015-1", "Paper 2020-0"]


def test_a_trail_reaches_to_a_publication_that_lies_ahead():
    assert later_of([date(2030, 1, 1)], date(2026, 1, 1)) == date(2030, 1, 1)
    assert later_of([], date(2026, 1, 1)) == date(2026, 1, 1)


def test_a_long_unit_is_said_once_and_not_on_every_tick():
    words = texts(
        parse(trail_figure(replace(TRAIL, measure=Measure("test scores", "standard deviations", 2)), ident="t"))
    )
    assert [text for text in words if "standard" in text] == ["standard"]
    assert "deviations" in words
    assert "+4.00" in words
    narrow = trail_figure(replace(TRAIL, measure=Measure("yield", "kilograms a hectare", 0)), ident="t", narrow=True)
    assert [text for text in texts(parse(narrow)) if "kilograms" in text] == ["+4 3 to 5 kilograms a hectare"]


def test_the_axis_makes_room_for_large_numbers():
    steps = (replace(STEPS[1], value=2.0e6, low=1.0e6, high=3.0e6),)
    root = parse(trail_figure(Trail(Measure("income", "", 0), steps, 0.95, date(2020, 1, 1)), ident="t"))
    (line,) = of_class(root, "null", "line")
    longest = max(
        len("".join(node.itertext())) for node in of_class(root, "axis", "text") if node.get("text-anchor") == "end"
    )
    assert longest >= 8
    assert number(line, "x1") >= 7.2 * longest


def test_a_ratio_written_as_a_change_keeps_its_logarithmic_place():
    change = Measure("attendance", "%", 0, 1.0, ratio=True, as_change=True)
    steps = (replace(_step(2010, 0.5), low=0.25, high=1.0), replace(_step(2012, 2.0), low=1.0, high=4.0))
    trail = Trail(change, steps, 0.95, date(2014, 1, 1))
    root = parse(trail_figure(trail, ident="t"))
    (null,) = of_class(root, "null", "line")
    heights = [y for _, y in corners(of_class(root, "line", "polyline")[0])]
    assert heights[0] - number(null, "y1") == pytest.approx(number(null, "y1") - heights[-1], abs=0.2)
    assert "0\N{NO-BREAK SPACE}%" in texts(root)
    # Half is 50 % less, double is 100 % more.
    assert [row[4] for row in trail_table(trail).rows] == [-50.0, 100.0]
    assert [row[4] for row in trail_table(trail).written] == ["−50", "100"]
    assert trail_sentence(trail).endswith("and its interval includes zero.")
