"""Printed numbers that cannot all be right, once rounding is allowed for.

Every printed item (estimate b, standard error, t, z, interval, F, p) is a band of straight lines in the plane of the
true pair (|b|, standard error): a t statistic between 2.35 and 2.45, for instance, is the wedge
2.35 se <= |b| <= 2.45 se. The items can all be right exactly when these bands share a point, so the test is
whether a polygon clipped by them is empty. Single items are tried first, then pairs, then all of them, so the
discrepancy names what disagrees.

p values and intervals may rest on the normal or on Student's distribution. Degrees of freedom printed beside the
estimate settle it; in a regression the normal, the residual and the cluster degrees of freedom are tried in turn; where
nothing is known any from one to infinity is allowed. Only what is impossible under all of them is reported.
Test statistics may be printed without their sign.
"""

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from itertools import combinations

from evidence.readings.errors import Discrepancy
from evidence.readings.kinds import (
    Interval,
    Precision,
    Reading,
    ReadyMadeEffect,
    Regression,
    Term,
)
from evidence.readings.precision import (
    EstimateScale,
    Span,
    degrees_of_freedom_of,
    f_as_t,
    interval_quantile,
    p_as_statistic,
    span,
    two_sided_quantile,
)
from evidence.readings.printed import Printed
from evidence.readings.reader import percent
from evidence.readings.vocabulary import DiscrepancyCode, EffectScale, Metric, TermForm, VariableScale

# Slack for floating-point arithmetic only, far below any printed digit.
_SLACK = 1e-9


@dataclass(frozen=True, slots=True)
class _HalfPlane:
    """a |b| + c se <= limit."""

    a: float
    c: float
    limit: float


@dataclass(frozen=True, slots=True)
class _Reference:
    """The distributions that p values and intervals may rest on: Student's with few to many degrees of freedom.

    ``None`` is the normal distribution.
    """

    fewest: float | None
    most: float | None


_ANY = _Reference(1.0, None)


@dataclass(frozen=True, slots=True)
class _Item:
    """One printed sign of precision: its field, its words, and its half-planes for a sign and a distribution."""

    key: str
    words: str
    code: DiscrepancyCode
    negative_only: bool = False
    wedge: Span | None = None
    error: Span | None = None
    p: Printed | None = None
    p_below: float | None = None
    interval: Interval | None = None

    def half_planes(self, sign: int, reference: _Reference, scale: EstimateScale) -> Iterator[_HalfPlane]:
        if self.error is not None:
            yield _HalfPlane(0.0, -1.0, -self.error.low)
            yield _HalfPlane(0.0, 1.0, self.error.high)
        wedge = self.wedge
        if self.p is not None:
            wedge = Span(
                p_as_statistic(self.p, reference.most).low,
                p_as_statistic(self.p, reference.most).point,
                p_as_statistic(self.p, reference.fewest).high,
            )
        if wedge is not None:
            yield _HalfPlane(-1.0, wedge.low, 0.0)
            if math.isfinite(wedge.high):
                yield _HalfPlane(1.0, -wedge.high, 0.0)
        if self.p_below is not None:
            yield _HalfPlane(-1.0, two_sided_quantile(self.p_below, reference.most), 0.0)
        if self.interval is not None:
            # low <= b - q se and b + q se <= high, for some quantile q between the two.
            smallest = interval_quantile(self.interval, reference.most)
            largest = interval_quantile(self.interval, reference.fewest)
            low, high = span(self.interval.low, scale), span(self.interval.high, scale)
            yield _HalfPlane(sign, -largest, low.high)
            yield _HalfPlane(-sign, smallest, -low.low)
            yield _HalfPlane(sign, smallest, high.high)
            yield _HalfPlane(-sign, -largest, -high.low)
            yield _HalfPlane(2.0 * sign, 0.0, low.high + high.high)
            yield _HalfPlane(-2.0 * sign, 0.0, -low.low - high.low)


def check_consistency(reading: Reading) -> tuple[Discrepancy, ...]:
    """Everything printed in one reading that cannot all be right; empty when it can.

    Never a reason to refuse the reading: the paper may really print it. Pointers are relative to the reading.
    """
    if isinstance(reading, ReadyMadeEffect):
        return tuple(_check_ready_made(reading))
    if isinstance(reading, Regression):
        return tuple(_check_regression(reading))
    # Counts, means and correlations stand alone; whatever is impossible about them was refused by ``read``.
    return ()


def _check_ready_made(reading: ReadyMadeEffect) -> Iterator[Discrepancy]:
    scale = EstimateScale.LOGARITHM if reading.scale is EffectScale.RATIO else EstimateScale.IDENTITY
    # Intervals of correlations are not centred on the printed scale; they say nothing that could be impossible.
    with_interval = reading.metric not in (Metric.CORRELATION, Metric.PARTIAL_CORRELATION)
    yield from _check_precision(reading.estimate, reading.precision, "", (), scale, with_interval=with_interval)
    degrees = degrees_of_freedom_of(reading.precision)
    if reading.observations is not None and degrees is not None and degrees >= reading.observations:
        yield Discrepancy(
            DiscrepancyCode.DEGREES_OF_FREEDOM_EXCEED_OBSERVATIONS,
            "/degrees_of_freedom",
            f"{reading.observations} observations leave fewer than {degrees:g} degrees of freedom. Check both.",
        )


def _check_precision(
    estimate: Printed | None,
    precision: Precision,
    pointer: str,
    more_degrees: Iterable[float],
    scale: EstimateScale = EstimateScale.IDENTITY,
    *,
    with_interval: bool = True,
) -> Iterator[Discrepancy]:
    if estimate is None:
        return
    items = _items(precision, with_interval)
    if not items:
        return
    own = degrees_of_freedom_of(precision)
    known = [_Reference(each, each) for each in dict.fromkeys(more_degrees)]
    references: list[_Reference] = [_ANY]
    if own is not None:
        references = [_Reference(own, own)]
    elif known:
        references = [_Reference(None, None), *known]
    b = span(estimate, scale)

    def possible(chosen: tuple[_Item, ...]) -> bool:
        return any(_share_a_point(b, chosen, reference, scale) for reference in references)

    # The common case is agreement, and one test of all items settles it.
    if possible(items):
        return
    wrong_alone = [item for item in items if not possible((item,))]
    for item in wrong_alone:
        yield _alone(estimate, item, pointer)
    fine = [item for item in items if item not in wrong_alone]
    pairs = [pair for pair in combinations(fine, 2) if not possible(pair)]
    for first, second in pairs:
        code = min((first.code, second.code), key=_PAIR_ORDER.index)
        yield Discrepancy(
            code,
            f"{pointer}/{second.key}",
            f"For the estimate {estimate}, {first.words} and {second.words} cannot both be right, whatever the "
            "rounding. Check both for a misread digit or a neighbouring row.",
        )
    if not pairs and len(fine) > 2 and not possible(tuple(fine)):
        listed = ", ".join(item.words for item in fine)
        yield Discrepancy(
            DiscrepancyCode.JOINTLY_IMPOSSIBLE,
            f"{pointer}/{fine[0].key}",
            f"For the estimate {estimate}, {listed} cannot all be right, whatever the rounding. Check each.",
        )


_PAIR_ORDER = (
    DiscrepancyCode.P_VALUE_DISAGREES,
    DiscrepancyCode.STANDARD_ERROR_DISAGREES,
    DiscrepancyCode.INTERVAL_DISAGREES,
    DiscrepancyCode.TEST_STATISTIC_DISAGREES,
)


def _alone(estimate: Printed, item: _Item, pointer: str) -> Discrepancy:
    if item.interval is not None:
        middle = (item.interval.low.number + item.interval.high.number) / 2
        return Discrepancy(
            DiscrepancyCode.INTERVAL_NOT_CENTRED,
            f"{pointer}/interval",
            f"{estimate} is not in the middle of {item.words} ({middle:g}), whatever the rounding. Check the digits; "
            "an interval of a ratio is centred on its logarithm, and its scale is 'ratio'.",
        )
    if item.negative_only:
        return Discrepancy(
            DiscrepancyCode.SIGN_DISAGREES,
            f"{pointer}/{item.key}",
            f"The estimate {estimate} is positive and {item.words} is negative. Check for a missing minus sign.",
        )
    # An estimate printed as 0.000 with a large t, say, or an exact zero with a significant p.
    return Discrepancy(
        item.code,
        f"{pointer}/{item.key}",
        f"The estimate {estimate} and {item.words} cannot both be right, whatever the rounding.",
    )


def _items(precision: Precision, with_interval: bool) -> tuple[_Item, ...]:
    items: list[_Item] = []
    if (error := precision.standard_error) is not None:
        items.append(
            _Item(
                "standard_error",
                f"the standard error {error}",
                DiscrepancyCode.STANDARD_ERROR_DISAGREES,
                error=span(error),
            )
        )
    for key, statistic in (("t", precision.t), ("z", precision.z)):
        if statistic is not None:
            values = span(statistic)
            items.append(
                _Item(
                    key,
                    f"{key} = {statistic}",
                    DiscrepancyCode.TEST_STATISTIC_DISAGREES,
                    negative_only=values.high < 0,
                    wedge=values.magnitude(),
                )
            )
    if (f := precision.f) is not None:
        items.append(_Item("f", f"F = {f}", DiscrepancyCode.TEST_STATISTIC_DISAGREES, wedge=f_as_t(f)))
    if (interval := precision.interval) is not None and with_interval:
        words = f"its {percent(interval.level)} % interval, {interval.low} to {interval.high}"
        items.append(_Item("interval", words, DiscrepancyCode.INTERVAL_DISAGREES, interval=interval))
    if (p := precision.p) is not None:
        items.append(_Item("p", f"p = {p}", DiscrepancyCode.P_VALUE_DISAGREES, p=p))
    if (below := precision.p_below) is not None:
        items.append(_Item("p_below", f"p < {below}", DiscrepancyCode.P_VALUE_DISAGREES, p_below=below.number))
    return tuple(items)


def _share_a_point(b: Span, items: tuple[_Item, ...], reference: _Reference, scale: EstimateScale) -> bool:
    """Whether some (b, standard error > 0) rounds to everything printed in ``items``."""
    return (b.high >= 0 and _feasible(b.low, b.high, 1, items, reference, scale)) or (
        b.low <= 0 and _feasible(-b.high, -b.low, -1, items, reference, scale)
    )


def _feasible(
    low: float, high: float, sign: int, items: tuple[_Item, ...], reference: _Reference, scale: EstimateScale
) -> bool:
    """Clip the strip low <= |b| <= high, se >= 0 by every half-plane; the items agree when something is left."""
    if sign > 0 and any(item.negative_only for item in items):
        return False
    planes = [plane for item in items for plane in item.half_planes(sign, reference, scale)]
    low = max(low, 0.0)
    size = max(high, *(abs(plane.limit) for plane in planes), 1e-300)
    # Standard errors beyond this are not told apart from infinity by any item.
    ceiling = 1e6 * size
    polygon = [(low, 0.0), (high, 0.0), (high, ceiling), (low, ceiling)]
    for plane in planes:
        slack = _SLACK * (abs(plane.a) * high + abs(plane.limit)) + 1e-300
        polygon = _clip(polygon, plane, slack)
        if not polygon:
            return False
    return True


def _clip(polygon: list[tuple[float, float]], plane: _HalfPlane, slack: float) -> list[tuple[float, float]]:
    """Sutherland and Hodgman's (1974) clipping of a convex polygon by one half-plane."""
    excess = [plane.a * x + plane.c * y - plane.limit - slack for x, y in polygon]
    kept: list[tuple[float, float]] = []
    for i, (point, over) in enumerate(zip(polygon, excess, strict=True)):
        before, over_before = polygon[i - 1], excess[i - 1]
        if (over > 0) != (over_before > 0):
            share = over_before / (over_before - over)
            kept.append((before[0] + share * (point[0] - before[0]), before[1] + share * (point[1] - before[1])))
        if over <= 0:
            kept.append(point)
    return kept


# --- regressions --------------------------------------------------------------------------------------------------


def _check_regression(reading: Regression) -> Iterator[Discrepancy]:
    degrees: list[float] = []
    if reading.residual_degrees_of_freedom is not None:
        degrees.append(reading.residual_degrees_of_freedom)
    if reading.clusters is not None and reading.clusters > 1:
        degrees.append(reading.clusters - 1)
    for i, term in enumerate(reading.terms):
        yield from _check_precision(term.coefficient, term.precision, f"/terms/{i}", degrees)
    yield from _check_covariances(reading)
    if reading.marginal_effect is not None:
        marginal = reading.marginal_effect
        yield from _check_precision(marginal.estimate, marginal.precision, "/marginal_effect", degrees)
        yield from _check_marginal_estimate(reading)
    yield from _check_counts(reading)


def _check_covariances(reading: Regression) -> Iterator[Discrepancy]:
    largest = {
        term.name: span(term.precision.standard_error).high
        for term in reading.terms
        if term.precision.standard_error is not None
    }
    for i, covariance in enumerate(reading.covariances or ()):
        first, second = covariance.between
        if first not in largest or second not in largest:
            continue
        if span(covariance.value).magnitude().low > largest[first] * largest[second] * (1 + _SLACK):
            yield Discrepancy(
                DiscrepancyCode.COVARIANCE_EXCEEDS_STANDARD_ERRORS,
                f"/covariances/{i}/value",
                f"The covariance {covariance.value} of '{first}' and '{second}' is larger than the product of their "
                "standard errors, so their correlation would be beyond 1. Check the exponent, and that it is not a "
                "correlation.",
            )


def slope_at_printed_means(reading: Regression) -> Span | None:
    """What the coefficients, as printed, give for the marginal effect at the printed means, with its rounding.

    On the scale of the regression (per unit of the exposure as it enters). ``None`` when a mean is missing.
    """
    low = point = high = 0.0
    for term in reading.terms:
        slope = _derivative(reading, term)
        if slope is None:
            return None
        coefficient = span(term.coefficient)
        ends = [a * b for a in (slope.low, slope.high) for b in (coefficient.low, coefficient.high)]
        low, point, high = low + min(ends), point + slope.point * coefficient.point, high + max(ends)
    return Span(low, point, high)


def _derivative(reading: Regression, term: Term) -> Span | None:
    """The derivative of one term with respect to the exposure at the printed means, over what rounding allows."""
    if term.form is TermForm.LINEAR:
        return Span(1.0, 1.0, 1.0)
    if term.form is TermForm.INTERACTION:
        return None if term.at is None else span(term.at)
    if reading.exposure.mean is None:
        return None
    x = span(reading.exposure.mean)
    if term.form is TermForm.SQUARE:
        return Span(2 * x.low, 2 * x.point, 2 * x.high)
    if term.form is TermForm.CUBE:
        size = x.magnitude()
        return Span(3 * size.low**2, 3 * size.point**2, 3 * size.high**2)
    return Span(1 / x.high, 1 / x.point, 1 / x.low) if x.low > 0 else None


def _check_marginal_estimate(reading: Regression) -> Iterator[Discrepancy]:
    marginal = reading.marginal_effect
    if marginal is None or marginal.estimate is None:
        return
    computed = slope_at_printed_means(reading)
    if computed is None:
        return
    stated = span(marginal.estimate)
    slack = _SLACK * max(abs(computed.low), abs(computed.high), abs(stated.point))
    if stated.low > computed.high + slack or stated.high < computed.low - slack:
        scale = "log outcome" if reading.outcome.scale is VariableScale.LOGARITHM else "outcome"
        yield Discrepancy(
            DiscrepancyCode.MARGINAL_EFFECT_DISAGREES,
            "/marginal_effect/estimate",
            f"The paper prints a marginal effect of {marginal.estimate}, but its coefficients give "
            f"{computed.point:.4g} ({computed.low:.4g} to {computed.high:.4g} after rounding) at the printed means, in "
            f"units of the {scale}. It may be evaluated elsewhere; check the means and the coefficients.",
        )


def _check_counts(reading: Regression) -> Iterator[Discrepancy]:
    n = reading.observations
    if n is None:
        return
    degrees = reading.residual_degrees_of_freedom
    if degrees is not None and degrees + len(reading.terms) > n:
        yield Discrepancy(
            DiscrepancyCode.DEGREES_OF_FREEDOM_EXCEED_OBSERVATIONS,
            "/residual_degrees_of_freedom",
            f"{n} observations and {len(reading.terms)} terms leave fewer than {degrees} residual degrees of freedom. "
            "Check both.",
        )
    if reading.clusters is not None and reading.clusters > n:
        yield Discrepancy(
            DiscrepancyCode.CLUSTERS_EXCEED_OBSERVATIONS,
            "/clusters",
            f"{reading.clusters} clusters cannot be made of {n} observations. Check for swapped numbers.",
        )
