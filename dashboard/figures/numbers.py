"""How numbers and dates are written on pages and figures.

A true minus sign (U+2212) keeps the width of a plus sign, and a no-break space keeps a number and its unit on one line.
"""

import math
from dataclasses import dataclass
from datetime import date

MINUS = "\N{MINUS SIGN}"
NO_BREAK_SPACE = "\N{NO-BREAK SPACE}"

MONTHS = (
    "January",
    "February",
    "March",
    "April",
    "May",
    "June",
    "July",
    "August",
    "September",
    "October",
    "November",
    "December",
)


def write_number(value: float, decimals: int, *, signed: bool = False) -> str:
    """Write `value` with fixed `decimals`; `signed` puts a plus before positive numbers.

    A number that rounds to zero is written without any sign, so that "−0.0" never appears.
    Raises ValueError when the value is not finite: an unknown is words, never "nan".
    """
    if not math.isfinite(value):
        raise ValueError("Only a finite number can be written; say an unknown in words.")
    text = f"{abs(value):.{decimals}f}"
    if float(text) == 0:
        return text
    if value < 0:
        return MINUS + text
    return "+" + text if signed else text


def write_date(on: date) -> str:
    """Day, month in words, year: the same on every machine, whatever its locale."""
    return f"{on.day} {MONTHS[on.month - 1]} {on.year}"


def write_published(published_on: str) -> str:
    """A date of publication as exactly as it is known: "1948", "August 1973", "3 May 2019"."""
    year, *rest = published_on.split("-")
    if not rest:
        return year
    month = f"{MONTHS[int(rest[0]) - 1]} {year}"
    return month if len(rest) == 1 else f"{int(rest[1])} {month}"


def write_count(number: int, singular: str, plural: str | None = None) -> str:
    """The number with its noun: "1 paper", "41 papers"."""
    noun = singular if number == 1 else (plural or singular + "s")
    return f"{number:,}".replace(",", NO_BREAK_SPACE) + NO_BREAK_SPACE + noun


@dataclass(frozen=True)
class Measure:
    """What the numbers of a figure are and how to write them.

    name: the outcome in words, for titles. unit: "%" or a word, or "" when the metric has none.
    null: the value that means "no difference": 0, or 1 for ratios. ratio: true for risk and odds ratios, which are
    drawn on a logarithmic axis. as_change: a ratio is written as the percentage by which it differs from 1, as the
    sentence of the answer does ("+24.0 %" for 1.24).
    """

    name: str
    unit: str = ""
    decimals: int = 2
    null: float = 0.0
    ratio: bool = False
    as_change: bool = False

    def __post_init__(self) -> None:
        if self.ratio and self.null <= 0:
            raise ValueError("The null value of a ratio is positive, usually 1.")
        if self.as_change and not (self.ratio and self.null == 1):
            raise ValueError("Only a ratio compared with 1 can be written as a change.")

    @property
    def suffix(self) -> str:
        return NO_BREAK_SPACE + self.unit if self.unit else ""

    @property
    def signed(self) -> bool:
        """Whether positive numbers carry a plus: differences and changes do, ratios do not."""
        return not self.ratio or self.as_change

    @property
    def null_in_words(self) -> str:
        return "zero" if self.signed else self.write_bare(self.null)

    def shown(self, value: float) -> float:
        """The number that is written for a value of the figure."""
        return (value - 1) * 100 if self.as_change else value

    def write(self, value: float) -> str:
        """One value with its unit: "+4.3 %"; a plain ratio has no sign: "1.24"."""
        return write_number(self.shown(value), self.decimals, signed=self.signed) + self.suffix

    @property
    def unit_apart(self) -> str:
        """A unit too long to stand beside every number of an axis; a figure says it once."""
        return self.unit if len(self.unit) > 2 else ""

    def write_compact(self, value: float) -> str:
        """One value for an axis or a label: with its unit only where that is as short as "%"."""
        return self.write(value).removesuffix(self.suffix) + ("" if self.unit_apart else self.suffix)

    def write_bare(self, value: float) -> str:
        """One value for a place where the unit already stands: "4.3", "−3.1"."""
        return write_number(self.shown(value), self.decimals)

    def write_interval(self, low: float, high: float) -> str:
        return f"{self.write_bare(low)} to {self.write_bare(high)}"
