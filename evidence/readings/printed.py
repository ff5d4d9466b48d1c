"""A number as printed: its characters, its exact decimal value, and the values it may have been rounded from.

A paper that prints 0.052 says that the number lies between 0.0515 and 0.0525. The text is kept (a Unicode minus
stays one) so the digits, and with them this rounding interval, are never lost.
"""

import re
from dataclasses import dataclass
from decimal import Decimal

from evidence.readings.vocabulary import ErrorCode

LONGEST_TEXT = 48
#: Printed results lie far inside these; products of several of them then stay inside a float.
LARGEST = Decimal("1e30")
SMALLEST = Decimal("1e-30")

# Typesetters print the minus as a hyphen, a true minus or a dash, and some journals the decimal point as a
# raised dot. Each has one meaning, so each is accepted.
_SIGNS_AND_POINTS = str.maketrans(dict.fromkeys("−–‐‑‒﹣－", "-") | dict.fromkeys("·∙⋅", "."))
_PLAIN = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]{1,5})?")
_THOUSANDS = re.compile(r"[+-]?[0-9]{1,3}(?:(?:,[0-9]{3}){2,}(?:\.[0-9]*)?|,[0-9]{3}\.[0-9]*)")
_COMMA = re.compile(r"[+-]?[0-9]*(?:,[0-9]+)+(?:\.[0-9]*)?")
_STARS = re.compile(r"[*†‡§⁎∗]")
_HALF = Decimal("0.5")


class NotPrinted(ValueError):
    """The text is not a number as printed: ``code`` says why and ``detail`` what to do."""

    def __init__(self, code: ErrorCode, detail: str) -> None:
        self.code = code
        self.detail = detail
        super().__init__(detail)


@dataclass(frozen=True, slots=True)
class Printed:
    """A printed number.

    ``text`` as on the page (without surrounding blanks); ``value`` the exact decimal; ``low`` and ``high`` the
    ends of the interval of values that round to it, half a unit of the last digit either way. A whole number
    such as 1200 is taken as printed to its last digit.
    """

    text: str
    value: Decimal
    low: Decimal
    high: Decimal

    @property
    def number(self) -> float:
        """The value as a float."""
        return float(self.value)

    @property
    def significant_digits(self) -> int:
        """How many digits carry information: 2 for 0.050, 1 for 0.05, 0 for 0.00."""
        return len(self.value.as_tuple().digits) if self.value else 0

    def __str__(self) -> str:
        return self.text


def printed(text: str) -> Printed:
    """Read one number as printed; raise :class:`NotPrinted` with a sentence that says how to repair the text."""
    kept = text.strip()
    if len(kept) > LONGEST_TEXT:
        raise NotPrinted(
            ErrorCode.NUMBER_TOO_LONG,
            f"A number of {len(kept)} characters was not read off a page. Copy the printed digits only.",
        )
    plain = kept.translate(_SIGNS_AND_POINTS)
    if not _PLAIN.fullmatch(plain):
        if not _THOUSANDS.fullmatch(plain):
            raise _refusal(kept, plain)
        plain = plain.replace(",", "")
    value = Decimal(plain)
    exponent = value.as_tuple().exponent
    if not isinstance(exponent, int) or not -60 <= exponent <= 30 or (value and not SMALLEST <= abs(value) <= LARGEST):
        raise NotPrinted(
            ErrorCode.NUMBER_OUT_OF_RANGE,
            f"{kept!r} is outside what results are printed in (1e-30 to 1e30). Check the exponent.",
        )
    half = _HALF.scaleb(exponent)
    return Printed(text=kept, value=value, low=value - half, high=value + half)


def _refusal(kept: str, plain: str) -> NotPrinted:
    """The most helpful reason why this text is not a number."""
    if not kept:
        return NotPrinted(ErrorCode.NOT_A_NUMBER, "The number is empty. Leave the field out if nothing is printed.")
    if plain.lstrip("+-").casefold() in {"nan", "inf", "infinity", "∞"}:
        return NotPrinted(
            ErrorCode.NOT_FINITE, f"{kept!r} is not a printed result. Leave the field out if nothing is printed."
        )
    if _STARS.search(plain):
        return NotPrinted(
            ErrorCode.STARS_IN_NUMBER,
            f"{kept!r} carries significance marks. Write the number alone, and the threshold that the table's note "
            "gives for the marks in 'p_below'.",
        )
    if plain[0] in "<>≤≥=":
        return NotPrinted(
            ErrorCode.BOUND_IN_NUMBER,
            f"{kept!r} is a comparison. Write a bound such as 'p < 0.05' as 'p_below': \"0.05\", and an exact value "
            "alone.",
        )
    if _COMMA.fullmatch(plain):
        return NotPrinted(
            ErrorCode.AMBIGUOUS_COMMA,
            f"The comma in {kept!r} could mark thousands or decimals. Write a point for decimals and nothing for "
            "thousands.",
        )
    if "%" in plain:
        return NotPrinted(
            ErrorCode.PERCENT_IN_NUMBER,
            f"{kept!r} has a per cent sign. Write the number alone, on the scale that the reading states.",
        )
    if plain[0] in "([{" or plain[-1] in ")]}":
        return NotPrinted(ErrorCode.BRACKETS_IN_NUMBER, f"{kept!r} has brackets. Write the number without them.")
    return NotPrinted(
        ErrorCode.NOT_A_NUMBER, f'{kept!r} is not a number. Copy the printed digits, for instance "0.052".'
    )
