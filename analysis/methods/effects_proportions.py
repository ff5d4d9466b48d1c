"""Effects of two proportions: a events and b non-events among n1 treated, c and d among n2 controls."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

from .effects import EffectEstimate, NoEffect, estimate_or_reason
from .effects_vocabulary import Reason
from .errors import InvalidInput, UnknownChoice

Correction = Literal["constant", "treatment-arm", "none"]
CORRECTIONS: Final = ("constant", "treatment-arm", "none")
WHEN: Final = ("any-zero", "always")
DOUBLE_ZERO: Final = ("exclude", "correct")


@dataclass(frozen=True, slots=True)
class ZeroCells:
    """What to do about counts of zero.

    ``correction``: ``constant`` adds ``amount`` to all four cells; ``treatment-arm`` adds amounts in proportion
    to the group's own size (to the reciprocal of the opposite group's), the two summing to twice ``amount``
    (Sweeting, Sutton and Lambert 2004); ``none`` adds nothing. ``when``: only to tables with a zero
    (``any-zero``) or to every table (``always``). ``double_zero``: leave out (``exclude``) or ``correct`` tables
    in which nobody, or everybody, had the event in both groups.
    """

    correction: str = "constant"
    amount: float = 0.5
    when: str = "any-zero"
    double_zero: str = "exclude"

    def __post_init__(self) -> None:
        if self.correction not in CORRECTIONS:
            raise UnknownChoice("correction", self.correction, CORRECTIONS)
        if self.when not in WHEN:
            raise UnknownChoice("when", self.when, WHEN)
        if self.double_zero not in DOUBLE_ZERO:
            raise UnknownChoice("double_zero", self.double_zero, DOUBLE_ZERO)
        if not (math.isfinite(self.amount) and self.amount > 0):
            raise InvalidInput("amount", "must be a finite number above zero")


@dataclass(frozen=True, slots=True)
class FourCells:
    """The cells after any correction; ``added`` is what went to each treated and each control cell."""

    a: float
    b: float
    c: float
    d: float
    added: tuple[float, float]


def _cells(events: tuple[float, float], totals: tuple[float, float]) -> tuple[float, float, float, float]:
    for arm, (e, n) in enumerate(zip(events, totals, strict=True)):
        if not (math.isfinite(n) and n > 0):
            raise InvalidInput("totals", "must be above zero", arm)
        if not 0 <= e <= n:
            raise InvalidInput("events", "must lie between zero and the total", arm)
    return events[0], totals[0] - events[0], events[1], totals[1] - events[1]


def is_double_zero(events: tuple[float, float], totals: tuple[float, float]) -> bool:
    """Whether nobody, or everybody, had the event in both groups."""
    a, b, c, d = _cells(events, totals)
    return (a == 0 and c == 0) or (b == 0 and d == 0)


def corrected_cells(
    events: tuple[float, float], totals: tuple[float, float], zero_cells: ZeroCells
) -> FourCells | NoEffect:
    """The four cells with the continuity correction that ``zero_cells`` asks for.

    Parameters
    ----------
    events, totals : of the treated and the control group.
    """
    a, b, c, d = _cells(events, totals)
    has_zero = 0 in (a, b, c, d)
    if zero_cells.double_zero == "exclude" and is_double_zero(events, totals):
        return NoEffect(Reason.NO_EVENTS_ON_ONE_SIDE)
    if zero_cells.correction == "none" or not (has_zero or zero_cells.when == "always"):
        return FourCells(a, b, c, d, (0.0, 0.0))
    if zero_cells.correction == "constant":
        treated = control = zero_cells.amount
    else:
        n1, n2 = totals
        treated = 2 * zero_cells.amount * n1 / (n1 + n2)
        control = 2 * zero_cells.amount * n2 / (n1 + n2)
    return FourCells(a + treated, b + treated, c + control, d + control, (treated, control))


def _added(cells: FourCells) -> tuple[tuple[str, float], ...]:
    if cells.added == (0.0, 0.0):
        return ()
    return (("added-to-treated-cells", cells.added[0]), ("added-to-control-cells", cells.added[1]))


def log_odds_ratio(
    events: tuple[float, float], totals: tuple[float, float], zero_cells: ZeroCells | None = None
) -> EffectEstimate | NoEffect:
    """ln(ad/bc) with variance 1/a + 1/b + 1/c + 1/d (Woolf 1955).

    Parameters
    ----------
    events, totals : of the treated and the control group; 0 <= events <= totals.
    zero_cells : see :class:`ZeroCells`; by default 0.5 is added to the cells of a table with a zero.

    Returns
    -------
    The effect; or no effect for a double zero that is excluded, or a zero that is not corrected.
    """
    cells = corrected_cells(events, totals, zero_cells or ZeroCells())
    if isinstance(cells, NoEffect):
        return cells
    a, b, c, d = cells.a, cells.b, cells.c, cells.d
    if 0 in (a, b, c, d):
        return NoEffect(Reason.ZERO_CELL)
    value = math.log(a) + math.log(d) - math.log(b) - math.log(c)
    return estimate_or_reason(value, 1 / a + 1 / b + 1 / c + 1 / d, _added(cells))


def log_risk_ratio(
    events: tuple[float, float], totals: tuple[float, float], zero_cells: ZeroCells | None = None
) -> EffectEstimate | NoEffect:
    """ln((a/n1)/(c/n2)) with variance 1/a - 1/n1 + 1/c - 1/n2 (Katz et al. 1978).

    Corrected cells have corrected totals. Without a correction, a table in which everybody had the event in both
    groups has no variance and so no effect.
    """
    cells = corrected_cells(events, totals, zero_cells or ZeroCells())
    if isinstance(cells, NoEffect):
        return cells
    a, b, c, d = cells.a, cells.b, cells.c, cells.d
    if a == 0 or c == 0:
        return NoEffect(Reason.ZERO_CELL)
    n1, n2 = a + b, c + d
    risk1, risk2 = a / n1, c / n2
    # 1/a - 1/n1 = b/(a n1), without the cancellation.
    variance = b / (a * n1) + d / (c * n2)
    value = math.log(risk1) - math.log(risk2)
    return estimate_or_reason(value, variance, (("risk-treated", risk1), ("risk-control", risk2), *_added(cells)))


def risk_difference(
    events: tuple[float, float], totals: tuple[float, float], zero_cells: ZeroCells | None = None
) -> EffectEstimate | NoEffect:
    """a/n1 - c/n2 with variance ab/n1^3 + cd/n2^3.

    A single zero needs no correction here. Cells are corrected only where the variance would vanish: in a double
    zero that the policy corrects, and in a table of nobody against everybody.
    """
    policy = zero_cells or ZeroCells()
    a, b, c, d = _cells(events, totals)
    added: tuple[tuple[str, float], ...] = ()
    if a * b == 0 and c * d == 0:
        cells = corrected_cells(events, totals, policy)
        if isinstance(cells, NoEffect):
            return cells
        a, b, c, d, added = cells.a, cells.b, cells.c, cells.d, _added(cells)
    n1, n2 = a + b, c + d
    risk1, risk2 = a / n1, c / n2
    variance = risk1 * (b / n1) / n1 + risk2 * (d / n2) / n2
    return estimate_or_reason(risk1 - risk2, variance, (("risk-treated", risk1), ("risk-control", risk2), *added))
