"""Recover a standard error from whichever sign of precision a paper prints.

Rules (two-sided throughout; t quantiles when degrees of freedom are known, normal ones otherwise), as in the Cochrane
Handbook for Systematic Reviews of Interventions, version 5.1, sections 7.7.3.3 and 7.7.7:

- standard error: itself;
- t or z: |estimate| / |statistic|;
- interval: (high - low) / (2 quantile), of logarithms for a ratio;
- F with one numerator degree of freedom: |estimate| / sqrt(F);
- exact p: |estimate| / quantile(p);
- "p < 0.05" or stars: only a bound, standard error < |estimate| / quantile(0.05), and kept as a bound.

A printed standard error is used as it stands, unless it has a single significant digit (0.02 may be anything from
0.015 to 0.025) and another item pins it more tightly. Without one, the item that pins it most tightly after rounding
is used.
"""

import math
from dataclasses import dataclass
from decimal import Decimal
from enum import Enum, auto
from functools import lru_cache

from scipy.special import ndtri, stdtrit

from evidence.readings.kinds import Interval, Precision
from evidence.readings.printed import Printed
from evidence.readings.vocabulary import PrecisionSource, Unrecovered


class EstimateScale(Enum):
    """The scale on which an estimate and its interval are handled."""

    IDENTITY = auto()
    LOGARITHM = auto()
    """Printed as a ratio: logarithms of the estimate and of both limits."""
    CORRELATION = auto()
    """Limits usually come back from Fisher's z, so they are centred there rather than on the correlation."""


@dataclass(frozen=True, slots=True)
class Span:
    """A number as a float with the interval of values that round to it."""

    low: float
    point: float
    high: float

    def magnitude(self) -> "Span":
        """The span of the absolute value."""
        if self.low >= 0:
            return self
        if self.high <= 0:
            return Span(-self.high, -self.point, -self.low)
        return Span(0.0, abs(self.point), max(-self.low, self.high))


@dataclass(frozen=True, slots=True)
class RecoveredPrecision:
    """A standard error and where it came from.

    ``standard_error`` on the scale of the handled estimate (of the logarithm for a ratio); the upper bound when
    ``is_bound``; ``None`` with a ``reason`` when nothing could be recovered. ``low`` and ``high`` are what rounding of
    the printed digits allows (``high`` is ``None`` where rounding sets no upper end). ``quantile`` is the one used
    for an interval or p value, with ``degrees_of_freedom`` when it was Student's.
    """

    standard_error: float | None
    low: float | None
    high: float | None
    source: PrecisionSource | None
    is_bound: bool = False
    quantile: float | None = None
    degrees_of_freedom: float | None = None
    coarse_standard_error_set_aside: bool = False
    reason: Unrecovered | None = None


@lru_cache(maxsize=4096)
def two_sided_quantile(p: float, degrees_of_freedom: float | None = None) -> float:
    """The value that |Z| (or |t|) exceeds with probability ``p``; 0 at p = 1, infinite at p = 0.

    Taken from the lower tail, so that tiny p values keep their digits.
    """
    if p <= 0.0:
        return math.inf
    if p >= 1.0:
        return 0.0
    tail = ndtri(p / 2) if degrees_of_freedom is None else stdtrit(degrees_of_freedom, p / 2)
    return abs(float(tail))


def exact_number(value: float) -> Printed:
    """A computed number in the shape of a printed one, without a rounding interval."""
    exact = Decimal(value)
    return Printed(text=repr(value), value=exact, low=exact, high=exact)


def span(number: Printed, scale: EstimateScale = EstimateScale.IDENTITY) -> Span:
    """The printed number and its rounding interval as floats, on a scale."""
    if scale is EstimateScale.LOGARITHM:
        return Span(math.log(number.low), math.log(number.value), math.log(number.high))
    return Span(float(number.low), float(number.value), float(number.high))


def degrees_of_freedom_of(precision: Precision) -> float | None:
    """The degrees of freedom printed beside an estimate."""
    degrees = precision.degrees_of_freedom
    return degrees.number if isinstance(degrees, Printed) else degrees


def recover_precision(
    estimate: Printed | None,
    precision: Precision,
    *,
    scale: EstimateScale = EstimateScale.IDENTITY,
    degrees_of_freedom: float | None = None,
) -> RecoveredPrecision:
    """Recover the standard error of ``estimate``.

    Parameters
    ----------
    estimate : the printed estimate; ``None`` when only its precision is printed, and then t, z, F and p values say
        nothing.
    precision : what is printed beside it.
    scale : see :class:`EstimateScale`.
    degrees_of_freedom : of the regression, used when none are printed beside the estimate itself.
    """
    stated = degrees_of_freedom_of(precision)
    if stated is None:
        stated = degrees_of_freedom
    b = None if estimate is None else span(estimate, scale).magnitude()
    own = precision.standard_error
    if own is not None:
        kept = _Found(PrecisionSource.STANDARD_ERROR, span(own))
        if own.significant_digits > 1 or own.low == own.high:
            return kept.recovered()
        finer = _finest(b, estimate, precision, scale, stated)
        if finer is not None and finer.looseness < kept.looseness:
            return finer.recovered(set_aside=True)
        return kept.recovered()
    found = _finest(b, estimate, precision, scale, stated)
    if found is not None:
        return found.recovered()
    threshold = _threshold(precision)
    if threshold is not None and b is not None and b.point > 0:
        quantile = two_sided_quantile(threshold, stated)
        if quantile > 0:
            bound = b.point / quantile
            return RecoveredPrecision(bound, 0.0, b.high / quantile, PrecisionSource.P_BELOW, True, quantile, stated)
    return RecoveredPrecision(None, None, None, None, reason=_why_not(estimate, precision))


@dataclass(frozen=True, slots=True)
class _Found:
    source: PrecisionSource
    error: Span
    quantile: float | None = None
    degrees_of_freedom: float | None = None

    @property
    def looseness(self) -> float:
        """Width of what rounding allows, relative to the recovered standard error."""
        return (self.error.high - self.error.low) / self.error.point

    def recovered(self, *, set_aside: bool = False) -> RecoveredPrecision:
        return RecoveredPrecision(
            self.error.point,
            max(self.error.low, 0.0),
            self.error.high if math.isfinite(self.error.high) else None,
            self.source,
            False,
            self.quantile,
            self.degrees_of_freedom,
            set_aside,
        )


def _finest(
    b: Span | None, estimate: Printed | None, precision: Precision, scale: EstimateScale, degrees: float | None
) -> _Found | None:
    """The item other than the standard error that pins it most tightly; the first of equals."""
    found: list[_Found] = []
    if precision.interval is not None:
        found.append(_from_interval(estimate, precision.interval, scale, degrees))
    if b is not None and b.point > 0:
        for source, statistic in ((PrecisionSource.T, precision.t), (PrecisionSource.Z, precision.z)):
            if statistic is not None and statistic.value != 0:
                found.append(_Found(source, _quotient(b, span(statistic).magnitude())))
        if precision.f is not None and precision.f.value > 0:
            found.append(_Found(PrecisionSource.F, _quotient(b, f_as_t(precision.f)), None, degrees))
        if precision.p is not None and 0 < precision.p.value < 1:
            statistic_span = p_as_statistic(precision.p, degrees)
            if statistic_span.point > 0:
                found.append(_Found(PrecisionSource.P, _quotient(b, statistic_span), statistic_span.point, degrees))
    return min(found, key=lambda each: each.looseness, default=None)


def _quotient(b: Span, statistic: Span) -> Span:
    high = b.high / statistic.low if statistic.low > 0 else math.inf
    low = b.low / statistic.high if math.isfinite(statistic.high) else 0.0
    return Span(low, b.point / statistic.point, high)


def f_as_t(f: Printed) -> Span:
    """The absolute t statistic of an F with one numerator degree of freedom."""
    squared = span(f)
    return Span(math.sqrt(max(squared.low, 0.0)), math.sqrt(squared.point), math.sqrt(squared.high))


def p_as_statistic(p: Printed, degrees_of_freedom: float | None) -> Span:
    """The absolute test statistics whose two-sided p values round to the printed one."""
    values = span(p)
    return Span(
        two_sided_quantile(values.high, degrees_of_freedom),
        two_sided_quantile(values.point, degrees_of_freedom),
        two_sided_quantile(values.low, degrees_of_freedom),
    )


def interval_quantile(interval: Interval, degrees_of_freedom: float | None) -> float:
    """The quantile that spans half of a two-sided interval of this level."""
    return two_sided_quantile(float(1 - interval.level.value), degrees_of_freedom)


def _from_interval(estimate: Printed | None, interval: Interval, scale: EstimateScale, degrees: float | None) -> _Found:
    quantile = interval_quantile(interval, degrees)
    if scale is EstimateScale.CORRELATION and estimate is not None and centred_on_fisher_z(estimate, interval):
        # An interval computed on Fisher's z: its width there, carried back to the correlation by the delta method.
        slope = 1.0 - estimate.number**2
        low, high = math.atanh(interval.low.number), math.atanh(interval.high.number)
        point = slope * (high - low) / (2 * quantile)
        half = slope * (_atanh_rounding(interval.low) + _atanh_rounding(interval.high)) / (2 * quantile)
        return _Found(PrecisionSource.INTERVAL, Span(point - half, point, point + half), quantile, degrees)
    on = EstimateScale.LOGARITHM if scale is EstimateScale.LOGARITHM else EstimateScale.IDENTITY
    low_span, high_span = span(interval.low, on), span(interval.high, on)
    width = 2 * quantile
    return _Found(
        PrecisionSource.INTERVAL,
        Span(
            (high_span.low - low_span.high) / width,
            (high_span.point - low_span.point) / width,
            (high_span.high - low_span.low) / width,
        ),
        quantile,
        degrees,
    )


def _atanh_rounding(limit: Printed) -> float:
    return (limit.high - limit.low).__float__() / 2 / (1.0 - limit.number**2)


def centred_on_fisher_z(estimate: Printed, interval: Interval) -> bool:
    """Whether a correlation sits nearer the middle of its interval on Fisher's z than on its own scale."""
    r, low, high = estimate.number, interval.low.number, interval.high.number
    if not (-1 < low < high < 1 and -1 < r < 1):
        return False
    z, z_low, z_high = math.atanh(r), math.atanh(low), math.atanh(high)
    return abs(2 * z - z_low - z_high) / (z_high - z_low) <= abs(2 * r - low - high) / (high - low)


def _threshold(precision: Precision) -> float | None:
    """The significance threshold that holds: the smallest of a printed bound and of a p value printed as zero."""
    thresholds = []
    if precision.p_below is not None:
        thresholds.append(precision.p_below.number)
    if precision.p is not None and precision.p.value == 0:
        thresholds.append(float(precision.p.high))
    return min(thresholds, default=None)


def _why_not(estimate: Printed | None, precision: Precision) -> Unrecovered:
    tests = (precision.t, precision.z, precision.f, precision.p, precision.p_below)
    if all(each is None for each in tests):
        return Unrecovered.NOT_PRINTED
    if estimate is None:
        return Unrecovered.NOT_PRINTED
    if estimate.value == 0:
        return Unrecovered.ESTIMATE_ROUNDS_TO_ZERO
    return Unrecovered.TEST_STATISTIC_ZERO
