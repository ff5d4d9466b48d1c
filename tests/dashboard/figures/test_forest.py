"""The forest plot. Conventions: squares whose area tells the weight, whiskers, a diamond as wide as the pooled interval
(Lewis & Clarke 2001, BMJ 322:1479). The numbers are invented."""

from dataclasses import replace
from itertools import pairwise

import pytest

from dashboard.figures.forest import (
    Forest,
    ForestRow,
    PooledRow,
    forest_figure,
    forest_sentence,
    forest_table,
)
from dashboard.figures.numbers import Measure

from .drawn import SVG, corners, number, of_class, parse, texts

REVENUE = Measure("farm-gate revenue", "%", 1)
RISK = Measure("diarrhoea", "", 2, 1.0, True)
ROWS = (
    ForestRow("Harrow Vale 2007", "table 2, column 1", 3.0, 0.5, 5.5, 0.4),
    ForestRow("Harrow Vale 2007", "table 2, column 2", 1.0, -2.0, 4.0, 0.1),
    ForestRow("Sele Plain 2010", "table 4, column 1", 6.0, 4.0, 8.0, 0.5, ("largest standard error taken",)),
)
FOREST = Forest(REVENUE, ROWS, PooledRow(4.3, 3.0, 5.7, -3.1, 11.8), 0.95)


def _scale(root):
    """From a value to a coordinate, read off the axis labels."""
    places = {}
    for node in of_class(root, "axis", "text"):
        text = "".join(node.itertext()).replace("\N{NO-BREAK SPACE}%", "").replace("−", "-")
        if node.get("text-anchor") == "middle":
            places[float(text)] = number(node, "x")
    (low, at_low), (high, at_high) = min(places.items()), max(places.items())
    return lambda value: at_low + (value - low) / (high - low) * (at_high - at_low)


@pytest.mark.parametrize("narrow", [False, True])
def test_squares_whiskers_diamond_and_bar_stand_at_their_values(narrow):
    root = parse(forest_figure(FOREST, ident="f", narrow=narrow))
    at = _scale(root)
    squares = of_class(root, "estimate", "rect")
    assert [number(s, "x") + number(s, "width") / 2 for s in squares] == pytest.approx(
        [at(3.0), at(1.0), at(6.0)], abs=0.3
    )
    whiskers = of_class(root, "whisker", "line")
    assert [(number(w, "x1"), number(w, "x2")) for w in whiskers] == [
        pytest.approx((at(row.low), at(row.high)), abs=0.3) for row in ROWS
    ]
    (diamond,) = of_class(root, "pooled", "polygon")
    across = [x for x, _ in corners(diamond)]
    assert across == pytest.approx([at(3.0), at(4.3), at(5.7), at(4.3)], abs=0.3)
    (bar,) = of_class(root, "prediction-bar", "rect")
    assert number(bar, "x") == pytest.approx(at(-3.1), abs=0.3)
    assert number(bar, "width") == pytest.approx(at(11.8) - at(-3.1), abs=0.3)


def test_the_heaviest_square_is_the_largest_and_size_grows_with_the_root_of_weight():
    root = parse(forest_figure(FOREST, ident="f"))
    sides = [number(square, "width") for square in of_class(root, "estimate", "rect")]
    assert sides[2] == 13
    # Side = 2.5 + 10.5 √(weight / largest weight): 0.1 of 0.5 gives 7.196, written to a tenth.
    assert sides[1] == 7.2
    assert sides[1] < sides[0] < sides[2]


def test_estimates_of_one_paper_stand_under_its_name_and_a_single_one_beside_it():
    words = texts(parse(forest_figure(FOREST, ident="f")))
    assert words.count("Harrow Vale 2007Harrow Vale 2007") == 1  # name and its full-length title
    assert "2\N{NO-BREAK SPACE}estimates" in words
    assert "table 2, column 1" in words
    assert "Sele Plain 2010" in words
    assert "+6.0 (4.0 to 8.0)" in words


def test_a_whisker_that_leaves_the_axis_ends_in_an_arrow():
    rows = (*ROWS, ForestRow("Far Coast 2012", "table 1", 5.0, -300.0, 310.0, 0.0))
    root = parse(forest_figure(replace(FOREST, rows=rows), ident="f"))
    arrows = of_class(root, "arrow", "polygon")
    assert len(arrows) == 2
    whisker = of_class(root, "whisker", "line")[-1]
    assert min(x for x, _ in corners(arrows[0])) < number(whisker, "x1")
    assert max(x for x, _ in corners(arrows[1])) > number(whisker, "x2")
    assert of_class(parse(forest_figure(FOREST, ident="f")), "arrow") == []


def test_an_estimate_far_off_leaves_an_arrow_and_its_number():
    rows = tuple(ForestRow(f"Paper {n}", "", n / 2, n / 2 - 1, n / 2 + 1, 0.1) for n in range(9))
    far = ForestRow("Far 2020", "", 900.0, 899.0, 901.0, 0.1)
    root = parse(forest_figure(Forest(REVENUE, (*rows, far), None, 0.95), ident="f"))
    assert len(of_class(root, "estimate", "rect")) == 9
    assert len(of_class(root, "arrow", "polygon")) == 1
    assert "+900.0 (899.0 to 901.0)" in texts(root)


def test_ratios_are_drawn_on_logarithms():
    rows = (ForestRow("A", "", 0.5, 0.25, 1.0, 0.5), ForestRow("B", "", 2.0, 1.0, 4.0, 0.5))
    root = parse(forest_figure(Forest(RISK, rows, None, 0.95), ident="f"))
    (null,) = of_class(root, "null", "line")
    left, right = [number(s, "x") + number(s, "width") / 2 for s in of_class(root, "estimate", "rect")]
    assert number(null, "x1") - left == pytest.approx(right - number(null, "x1"), abs=0.3)


@pytest.mark.parametrize("count", [1, 2, 500])
def test_any_number_of_rows_is_drawn_without_overlap(count):
    rows = tuple(
        ForestRow(f"Paper {n}", "table 1", n * 0.01, n * 0.01 - 1, n * 0.01 + 1, 1 / count) for n in range(count)
    )
    for narrow in (False, True):
        root = parse(forest_figure(Forest(REVENUE, rows, None, 0.95), ident="f", narrow=narrow))
        middles = [number(w, "y1") for w in of_class(root, "whisker", "line")]
        assert len(middles) == count
        assert all(later - earlier >= 20 for earlier, later in pairwise(middles))
        assert float(root.attrib["viewBox"].split()[3]) > middles[-1]


def test_the_drawing_leaves_room_for_long_numbers():
    rows = (ForestRow("A", "", 123456.7, 120000.1, 130000.2, 1.0),)
    root = parse(forest_figure(Forest(REVENUE, rows, None, 0.95), ident="f"))
    (whisker,) = of_class(root, "whisker", "line")
    (text,) = [t for t in texts(root) if "123456.7" in t]
    assert number(whisker, "x2") < 760 - len(text) * 6.5


def test_the_table_holds_exactly_what_is_drawn():
    table = forest_table(FOREST)
    assert table.rows == (
        ("Harrow Vale 2007", "table 2, column 1", 3.0, 0.5, 5.5, 0.4, ""),
        ("Harrow Vale 2007", "table 2, column 2", 1.0, -2.0, 4.0, 0.1, ""),
        ("Sele Plain 2010", "table 4, column 1", 6.0, 4.0, 8.0, 0.5, "largest standard error taken"),
        ("Pooled effect", "", 4.3, 3.0, 5.7, None, ""),
        ("One new setting", "", None, -3.1, 11.8, None, ""),
    )
    assert table.written[1] == ("Harrow Vale 2007", "table 2, column 2", "1.0", "−2.0", "4.0", "10.0", "")


def test_the_sentence_counts_what_is_drawn():
    space = "\N{NO-BREAK SPACE}"
    assert forest_sentence(FOREST) == (
        f"2{space}papers, 3{space}estimates: the estimates run from +1.0{space}% to +6.0{space}%, and 1 of 3 intervals"
        f" include zero. The pooled effect is +4.3{space}% (3.0 to 5.7)."
    )
    alone = replace(FOREST, rows=ROWS[2:], pooled=None)
    assert forest_sentence(alone).endswith(
        "the estimate is +6.0\N{NO-BREAK SPACE}%, and 0 of 1 intervals include zero. Nothing was pooled."
    )


def test_a_part_says_how_many_there_are_in_all():
    part = replace(FOREST, rows=ROWS[:2], total=3)
    assert "2\N{NO-BREAK SPACE}estimates of 3:" in forest_sentence(part)
    assert "Pooled effect, all 3 estimates" in texts(parse(forest_figure(part, ident="f")))


def test_averages_of_papers_are_called_so():
    averages = replace(FOREST, rows=ROWS[:2], total=9, averaged=True, papers_in_all=5)
    sentence = forest_sentence(averages)
    assert "of 5, those with most weight: the average" in sentence
    assert "estimates run" not in sentence


def test_hostile_labels_are_text_and_nothing_else():
    rows = (ForestRow("</svg><script>x</script>", "<b> & \x00", 1.0, 0.0, 2.0, 1.0, ("<i>",)),)
    root = parse(forest_figure(Forest(Measure("<o>", "<u>", 1), rows, None, 0.95), ident="f", note="<n>"))
    assert {node.tag.removeprefix(SVG) for node in root.iter()} <= {
        "svg",
        "title",
        "desc",
        "g",
        "line",
        "rect",
        "polygon",
        "text",
    }
    assert "</svg><script>x</script>" in "".join(texts(root))


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ((), "at least one row"),
        ((ROWS[0], ROWS[2], ROWS[1]), "stand together"),
        ((replace(ROWS[0], low=4.0),), "does not hold"),
        ((replace(ROWS[0], weight=-0.1),), "weight"),
    ],
)
def test_rows_that_cannot_be_drawn_are_refused(rows, message):
    with pytest.raises(ValueError, match=message):
        Forest(REVENUE, rows, None, 0.95)
