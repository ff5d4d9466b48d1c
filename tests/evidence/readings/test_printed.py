"""Numbers as printed: what is taken, what it may have been rounded from, and what is said about the rest.

Which characters journals use for minus, point and stars is common practice, no source.
"""

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from evidence.readings import ErrorCode, NotPrinted, printed


@pytest.mark.parametrize(
    ("text", "value", "low", "high"),
    [
        ("0.052", "0.052", "0.0515", "0.0525"),
        ("0.050", "0.050", "0.0495", "0.0505"),
        (".05", "0.05", "0.045", "0.055"),
        ("5.", "5", "4.5", "5.5"),
        ("1200", "1200", "1199.5", "1200.5"),
        ("+3", "3", "2.5", "3.5"),
        ("1.2e-5", "0.000012", "0.0000115", "0.0000125"),
        ("0.00", "0", "-0.005", "0.005"),
        ("1,234,567", "1234567", "1234566.5", "1234567.5"),
        ("1,234.50", "1234.5", "1234.495", "1234.505"),
    ],
)
def test_half_a_unit_of_the_last_digit_either_way(text, value, low, high):
    number = printed(text)
    assert (number.value, number.low, number.high) == (Decimal(value), Decimal(low), Decimal(high))
    assert number.text == text


@pytest.mark.parametrize("sign", "-−–‐‑‒﹣－")
def test_every_typographic_minus_is_one_and_is_kept(sign):
    number = printed(f"{sign}0.5")
    assert number.value == Decimal("-0.5")
    assert number.text == f"{sign}0.5"


def test_a_raised_dot_is_a_decimal_point_and_is_kept():
    assert printed("0·73").value == Decimal("0.73")
    assert printed("0·73").text == "0·73"


def test_blanks_around_a_number_are_not_digits():
    assert printed(" .05 ").text == ".05"


@pytest.mark.parametrize(
    ("text", "code", "says"),
    [
        ("1e400", ErrorCode.NUMBER_OUT_OF_RANGE, "exponent"),
        ("1e-400", ErrorCode.NUMBER_OUT_OF_RANGE, "exponent"),
        ("1e99999", ErrorCode.NUMBER_OUT_OF_RANGE, "exponent"),
        ("0e400", ErrorCode.NUMBER_OUT_OF_RANGE, "exponent"),
        ("1,234", ErrorCode.AMBIGUOUS_COMMA, "thousands or decimals"),
        ("0,05", ErrorCode.AMBIGUOUS_COMMA, "point for decimals"),
        ("0.05*", ErrorCode.STARS_IN_NUMBER, "p_below"),
        ("0.05†", ErrorCode.STARS_IN_NUMBER, "p_below"),
        ("<0.05", ErrorCode.BOUND_IN_NUMBER, "p_below"),
        ("(0.018)", ErrorCode.BRACKETS_IN_NUMBER, "without"),
        ("4.3%", ErrorCode.PERCENT_IN_NUMBER, "per cent"),
        ("NaN", ErrorCode.NOT_FINITE, "Leave the field out"),
        ("-Infinity", ErrorCode.NOT_FINITE, "Leave the field out"),
        ("", ErrorCode.NOT_A_NUMBER, "empty"),
        ("  ", ErrorCode.NOT_A_NUMBER, "empty"),
        ("n.s.", ErrorCode.NOT_A_NUMBER, "Copy the printed digits"),
        ("1_000", ErrorCode.NOT_A_NUMBER, "not a number"),
        ("٣", ErrorCode.NOT_A_NUMBER, "not a number"),
        ("--1", ErrorCode.NOT_A_NUMBER, "not a number"),
        ("1.2.3", ErrorCode.NOT_A_NUMBER, "not a number"),
        ("0x10", ErrorCode.NOT_A_NUMBER, "not a number"),
        ("9" * 500, ErrorCode.NUMBER_TOO_LONG, "printed digits only"),
    ],
)
def test_what_is_not_a_printed_number_says_how_to_repair_it(text, code, says):
    with pytest.raises(NotPrinted, match=says) as refusal:
        printed(text)
    assert refusal.value.code is code


@given(st.decimals("-1e9", "1e9", allow_nan=False, places=4))
def test_a_number_lies_in_the_middle_of_its_rounding_interval(value):
    number = printed(str(value))
    assert number.value == value
    assert number.low < value < number.high
    assert number.high - number.low == Decimal("0.0001")
    assert number.low + number.high == 2 * value


@given(st.text(max_size=60))
def test_any_text_is_a_number_or_is_refused_with_a_sentence(text):
    refused = None
    try:
        number = printed(text)
    except NotPrinted as refusal:
        refused = refusal
    if refused is None:
        assert number.value.is_finite()
        assert number.text == text.strip()
    else:
        assert refused.detail.endswith((".", "?"))
        assert isinstance(refused.code, ErrorCode)
