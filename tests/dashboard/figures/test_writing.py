"""Numbers, markup, tables and the stylesheet that travels with a figure."""

import csv
import io
from datetime import date
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboard.figures.numbers import Measure, write_count, write_date, write_number
from dashboard.figures.stylesheet import figure_rules, standalone
from dashboard.figures.svg import document, element, plain, shorten
from dashboard.figures.tables import Column, Table, as_csv, safe_cell


@pytest.mark.parametrize(
    ("value", "decimals", "signed", "text"),
    [
        (4.31, 1, True, "+4.3"),
        (-3.14, 1, True, "−3.1"),
        (-0.04, 1, True, "0.0"),
        (0.0, 2, True, "0.00"),
        (1234.5, 0, False, "1234"),
    ],
)
def test_numbers_are_written_with_a_true_minus_and_no_signed_zero(value, decimals, signed, text):
    assert write_number(value, decimals, signed=signed) == text


@pytest.mark.parametrize("value", [float("nan"), float("inf")])
def test_an_unknown_is_never_written_as_a_number(value):
    with pytest.raises(ValueError, match="finite"):
        write_number(value, 1)


def test_a_ratio_is_written_without_a_sign():
    assert Measure("risk", "", 2, 1.0, True).write(1.5) == "1.50"


def test_dates_and_counts_are_words():
    assert write_date(date(2026, 11, 12)) == "12 November 2026"
    assert write_count(1, "study", "studies") == "1\N{NO-BREAK SPACE}study"
    assert write_count(12345, "paper") == "12\N{NO-BREAK SPACE}345\N{NO-BREAK SPACE}papers"


@given(st.text())
def test_any_text_makes_well_formed_markup(text):
    node = ElementTree.fromstring(element("text", plain(text), class_=text))
    kept = "".join(
        c for c in text if c in "\t\n\r" or " " <= c <= "\ud7ff" or "\ue000" <= c <= "\ufffd" or c > "\uffff"
    )
    # XML 1.0 section 2.11: a parser reads every line end as a line feed.
    assert (node.text or "") == kept.replace("\r\n", "\n").replace("\r", "\n")


@pytest.mark.parametrize("name", ["style", "onload", "onclick", "x y", 'a"b'])
def test_attributes_a_strict_policy_would_refuse_cannot_be_written(name):
    with pytest.raises(ValueError, match="may not stand"):
        element("rect", **{name: "1"})


def test_a_figure_is_an_image_with_a_name_and_a_description():
    root = ElementTree.fromstring(
        document("", width=10, height=5, ident="a", title="T <b>", description="D & d", note="Invented data.")
    )
    title, described = root[0], root[1]
    assert root.get("role") == "img"
    assert root.get("aria-labelledby") == f"{title.get('id')} {described.get('id')}"
    assert (title.text, described.text) == ("T <b>", "D & d")
    assert root.get("viewBox") == "0 0 10 25"


def test_text_is_shortened_only_when_it_does_not_fit():
    assert shorten("Harrow Vale 2007", 200, 13) == "Harrow Vale 2007"
    short = shorten("A ministry with a very long name indeed", 100, 13)
    assert short.endswith("…")
    assert len(short) * 13 * 0.54 <= 110
    # Wide characters need twice the room.
    assert len(shorten("農" * 40, 130, 13)) <= 11


def _table(text: str) -> Table:
    return Table(
        "c",
        (Column("name", "Name"), Column("value", "Value", numeric=True)),
        ((text, -1.5), ("b", None)),
        ((text, "−1.5"), ("b", "")),
    )


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1", "\n=1"])
def test_csv_text_cannot_start_a_formula(text):
    # The characters are those of OWASP, "CSV Injection".
    read = list(csv.reader(io.StringIO(as_csv(_table(text)), newline="")))
    assert read[1] == ["'" + text, "-1.5"]
    assert safe_cell(-1.5) == -1.5


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_csv_keeps_every_digit_of_a_number(value):
    table = Table("c", (Column("v", "V", numeric=True),), ((value,),), (("",),))
    assert float(as_csv(table).splitlines()[1]) == value


def test_csv_carries_its_notes_on_every_row():
    read = list(csv.reader(io.StringIO(as_csv(_table("a"), notes=["Invented data.", "Change 3."]), newline="")))
    assert [row[-1] for row in read] == ["note", "Invented data. Change 3.", "Invented data. Change 3."]


def test_a_table_whose_rows_do_not_fit_its_columns_is_refused():
    with pytest.raises(ValueError, match="one cell for each column"):
        Table("c", (Column("a", "A"),), (("x", "y"),), (("x",),))


def test_a_downloaded_figure_carries_its_rules_without_variables():
    figure = document(element("rect", class_="estimate"), width=20, height=10, ident="a", title="T", description="D")
    root = ElementTree.fromstring(standalone(figure).encode())
    style = root.find("{http://www.w3.org/2000/svg}style")
    assert style is not None
    assert style.text == figure_rules()
    assert ".figure .estimate" in figure_rules()
    assert "var(" not in figure_rules()
    assert "@" not in figure_rules()
    assert (root.get("width"), root.get("height")) == ("20", "10")


def test_only_a_ratio_compared_with_one_can_be_written_as_a_change():
    assert Measure("risk", "%", 1, 1.0, ratio=True, as_change=True).write(1.24) == "+24.0\N{NO-BREAK SPACE}%"
    with pytest.raises(ValueError, match="written as a change"):
        Measure("risk", "%", 1, 0.0, as_change=True)
    with pytest.raises(ValueError, match="positive"):
        Measure("risk", "", 1, 0.0, ratio=True)
