"""Scales and axis ticks: from a number, a ratio or a date to a place on the sheet."""

import math
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date
from typing import Protocol


class Scale(Protocol):
    """Maps values to coordinates."""

    low: float
    high: float

    def at(self, value: float) -> float: ...

    def clamp(self, value: float) -> float: ...


@dataclass(frozen=True)
class LinearScale:
    """Maps [low, high] to [start, end]; `end` may lie below `start` (a vertical axis runs upwards)."""

    low: float
    high: float
    start: float
    end: float

    def __post_init__(self) -> None:
        if not self.low < self.high:
            raise ValueError("A scale needs a lower end below its upper end.")

    def at(self, value: float) -> float:
        return self.start + (value - self.low) / (self.high - self.low) * (self.end - self.start)

    def clamp(self, value: float) -> float:
        """The coordinate of `value`, held at the edge of the scale when it lies outside."""
        return self.at(min(max(value, self.low), self.high))


@dataclass(frozen=True)
class LogarithmicScale:
    """As `LinearScale`, on logarithms: equal ratios take equal room. Both ends are positive."""

    low: float
    high: float
    start: float
    end: float

    def __post_init__(self) -> None:
        if not 0 < self.low < self.high:
            raise ValueError("A logarithmic scale needs positive ends, the lower below the upper.")

    def at(self, value: float) -> float:
        if value <= 0:
            raise ValueError("A ratio is positive.")
        share = math.log(value / self.low) / math.log(self.high / self.low)
        return self.start + share * (self.end - self.start)

    def clamp(self, value: float) -> float:
        return self.at(min(max(value, self.low), self.high))


def covering(values: Iterable[float], *, ratio: bool = False, margin: float = 0.06) -> tuple[float, float]:
    """The ends of a scale that holds every value with a little room on both sides.

    When all values are equal the scale opens around them by a tenth of their size (by one when they are zero).
    Raises ValueError without values, or for a ratio that is not positive.
    """
    held = [math.log(value) if ratio else value for value in values]
    if not held:
        raise ValueError("A scale needs at least one value.")
    low, high = min(held), max(held)
    room = (high - low) * margin if high > low else (abs(low) * 0.1 or (0.1 if ratio else 1.0))
    low, high = low - room, high + room
    return (math.exp(low), math.exp(high)) if ratio else (low, high)


def number_ticks(low: float, high: float, about: int = 5) -> tuple[float, ...]:
    """Round numbers (steps of 1, 2 or 5 times a power of ten) within [low, high], `about` of them."""
    if not low < high:
        raise ValueError("Ticks need a lower end below the upper end.")
    rough = (high - low) / max(about, 1)
    power = 10.0 ** math.floor(math.log10(rough))
    step = next(factor * power for factor in (1, 2, 5, 10) if factor * power >= rough * 0.75)
    first = math.ceil(low / step - 1e-9)
    last = math.floor(high / step + 1e-9)
    # Multiples of the step, not a running sum: 0.1 added thirty times is not 3.
    decimals = max(0, -math.floor(math.log10(step)))
    return tuple(round(index * step, decimals) + 0.0 for index in range(first, last + 1))


def ratio_ticks(low: float, high: float, about: int = 5) -> tuple[float, ...]:
    """Ticks for a logarithmic axis: 1, 2, 5 times powers of ten; powers alone when those are too many.

    An axis that holds fewer than three such numbers gets evenly spaced ones.
    """
    if not 0 < low < high:
        raise ValueError("Ratio ticks need positive ends, the lower below the upper.")
    powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    for factors in ((1, 2, 5), (1,)):
        ticks = tuple(
            round(factor * 10.0**power, 12 + max(0, -power))
            for power in powers
            for factor in factors
            if low * (1 - 1e-9) <= factor * 10.0**power <= high * (1 + 1e-9)
        )
        if 3 <= len(ticks) <= about + 2:
            return ticks
    if len(ticks) > about:
        return ticks[:: math.ceil(len(ticks) / about)]
    return number_ticks(low, high, about)


def tick_decimals(ticks: Iterable[float]) -> int:
    """Decimals that write every tick exactly (at most six)."""
    needed = 0
    for tick in ticks:
        for decimals in range(needed, 7):
            if abs(round(tick, decimals) - tick) <= 1e-9 * max(1.0, abs(tick)) or decimals == 6:
                needed = decimals
                break
    return needed


def date_ticks(first: date, last: date, about: int = 7) -> tuple[tuple[date, str], ...]:
    """Starts of years in [first, last] with their labels, spaced 1, 2, 3, 5, 10 … years.

    When fewer than two years begin in the span: starts of months, labelled "2024-05" (ISO 8601, which sorts and needs
    no language). When no month begins either: the two ends in full.
    """
    if last < first:
        raise ValueError("The last date lies before the first.")
    for step in (1, 2, 3, 5, 10, 20, 25, 50, 100, 200, 500, 1000):
        years = [year for year in range(first.year, last.year + 1) if year % step == 0 and year >= 1]
        years = [year for year in years if first <= date(year, 1, 1) <= last]
        if len(years) <= about:
            break
    if len(years) >= 2:
        return tuple((date(year, 1, 1), str(year)) for year in years)
    months = [
        date(year, month, 1)
        for year in range(first.year, last.year + 1)
        for month in range(1, 13)
        if first <= date(year, month, 1) <= last
    ]
    if months:
        kept = months[:: max(1, math.ceil(len(months) / about))]
        return tuple((month, f"{month.year}-{month.month:02d}") for month in kept)
    return tuple((day, day.isoformat()) for day in dict.fromkeys((first, last)))
