"""Effects of two means: mean m, standard deviation s and number n of the treated (1) and the controls (2)."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

from .effects import EffectEstimate, NoEffect, estimate_or_reason, require_finite
from .effects_vocabulary import Reason
from .errors import InvalidInput, UnknownChoice

MEAN_VARIANCES: Final = ("pooled", "separate")
SMALL_SAMPLE_CORRECTIONS: Final = ("exact", "approximate", "none")


@dataclass(frozen=True, slots=True)
class GroupSummary:
    """Mean, standard deviation (>= 0, same units) and number of observations (>= 1) of one group."""

    mean: float
    standard_deviation: float
    observations: float

    def __post_init__(self) -> None:
        require_finite(mean=self.mean, standard_deviation=self.standard_deviation, observations=self.observations)
        if self.standard_deviation < 0:
            raise InvalidInput("standard_deviation", "must not be below zero")
        if self.observations < 1:
            raise InvalidInput("observations", "must be at least one")


def small_sample_correction(degrees_of_freedom: float) -> float:
    """Hedges' exact J(m) = Gamma(m/2) / (sqrt(m/2) Gamma((m - 1)/2)) (Hedges 1981).

    Through log-gamma, since Gamma itself overflows past m = 340; beyond m = 1e5, where the difference of two
    large logarithms loses digits, through its asymptotic series 1 - 3/(4m) - 7/(32m^2), exact there to 1e-15.
    Zero at m = 1.
    """
    m = degrees_of_freedom
    if not (math.isfinite(m) and m >= 1):
        raise InvalidInput("degrees_of_freedom", "must be at least one")
    if m == 1:
        return 0.0
    if m > 1e5:
        return 1.0 - 3.0 / (4.0 * m) - 7.0 / (32.0 * m * m)
    return math.exp(math.lgamma(m / 2) - math.lgamma((m - 1) / 2)) / math.sqrt(m / 2)


def approximate_small_sample_correction(degrees_of_freedom: float) -> float:
    """The approximation 1 - 3/(4m - 1) to J(m) (Hedges 1981), kept to replicate older work."""
    if not (math.isfinite(degrees_of_freedom) and degrees_of_freedom >= 1):
        raise InvalidInput("degrees_of_freedom", "must be at least one")
    return 1.0 - 3.0 / (4.0 * degrees_of_freedom - 1.0)


def pooled_standard_deviation(treated: GroupSummary, control: GroupSummary) -> float:
    """sqrt(((n1 - 1) s1^2 + (n2 - 1) s2^2) / (n1 + n2 - 2)); needs n1 + n2 > 2."""
    m = treated.observations + control.observations - 2
    if m <= 0:
        raise InvalidInput("observations", "must sum to more than two")
    # In units of the larger deviation, so that squares neither overflow nor vanish.
    unit = max(treated.standard_deviation, control.standard_deviation)
    if unit == 0:
        return 0.0
    one, two = treated.standard_deviation / unit, control.standard_deviation / unit
    squares = (treated.observations - 1) * one * one + (control.observations - 1) * two * two
    return unit * math.sqrt(squares / m)


def _refused(treated: GroupSummary, control: GroupSummary) -> NoEffect | None:
    """Why two groups have no pooled deviation. A group of one has no deviation of its own."""
    if min(treated.observations, control.observations) < 2:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    return None


def standardised_mean_difference(
    treated: GroupSummary, control: GroupSummary, *, correction: str = "exact"
) -> EffectEstimate | NoEffect:
    """Hedges' g = J d with variance J^2 (1/n1 + 1/n2 + d^2/(2(n1 + n2))).

    Parameters
    ----------
    treated, control : each of at least two observations.
    correction : ``exact`` (gamma functions), ``approximate`` (1 - 3/(4m - 1)) or ``none`` (d itself, J = 1).

    Returns
    -------
    The effect; no effect for groups of one or a pooled deviation of zero.
    """
    if correction not in SMALL_SAMPLE_CORRECTIONS:
        raise UnknownChoice("correction", correction, SMALL_SAMPLE_CORRECTIONS)
    if (refused := _refused(treated, control)) is not None:
        return refused
    n1, n2 = treated.observations, control.observations
    deviation = pooled_standard_deviation(treated, control)
    if deviation == 0:
        return NoEffect(Reason.ZERO_DEVIATION)
    d = (treated.mean - control.mean) / deviation
    j = 1.0
    if correction == "exact":
        j = small_sample_correction(n1 + n2 - 2)
    elif correction == "approximate":
        j = approximate_small_sample_correction(n1 + n2 - 2)
    variance = 1 / n1 + 1 / n2 + d * d / (2 * (n1 + n2))
    return estimate_or_reason(
        j * d,
        j * j * variance,
        (
            ("pooled-standard-deviation", deviation),
            ("difference-in-deviations", d),
            ("variance-before-correction", variance),
            ("small-sample-correction", j),
        ),
    )


def mean_difference(
    treated: GroupSummary, control: GroupSummary, *, variance: str = "pooled"
) -> EffectEstimate | NoEffect:
    """m1 - m2 with variance sp^2 (1/n1 + 1/n2) (``pooled``) or s1^2/n1 + s2^2/n2 (``separate``)."""
    if variance not in MEAN_VARIANCES:
        raise UnknownChoice("variance", variance, MEAN_VARIANCES)
    if (refused := _refused(treated, control)) is not None:
        return refused
    n1, n2 = treated.observations, control.observations
    difference = treated.mean - control.mean
    if variance == "separate":
        s1, s2 = treated.standard_deviation, control.standard_deviation
        return estimate_or_reason(difference, s1 * s1 / n1 + s2 * s2 / n2)
    deviation = pooled_standard_deviation(treated, control)
    return estimate_or_reason(
        difference, deviation * deviation * (1 / n1 + 1 / n2), (("pooled-standard-deviation", deviation),)
    )


def log_response_ratio(
    treated: GroupSummary, control: GroupSummary, *, variance: str = "separate"
) -> EffectEstimate | NoEffect:
    """ln(m1/m2) with variance s1^2/(n1 m1^2) + s2^2/(n2 m2^2) (Hedges, Gurevitch and Curtis 1999).

    With ``variance="pooled"`` the pooled deviation stands for both. Both means must be above zero.
    """
    if variance not in MEAN_VARIANCES:
        raise UnknownChoice("variance", variance, MEAN_VARIANCES)
    if treated.mean <= 0 or control.mean <= 0:
        return NoEffect(Reason.MEANS_NOT_POSITIVE)
    if (refused := _refused(treated, control)) is not None:
        return refused
    s1, s2 = treated.standard_deviation, control.standard_deviation
    steps: tuple[tuple[str, float], ...] = ()
    if variance == "pooled":
        s1 = s2 = pooled_standard_deviation(treated, control)
        steps = (("pooled-standard-deviation", s1),)
    relative1, relative2 = s1 / treated.mean, s2 / control.mean
    return estimate_or_reason(
        math.log(treated.mean) - math.log(control.mean),
        relative1 * relative1 / treated.observations + relative2 * relative2 / control.observations,
        steps,
    )


def two_sample_t(treated: GroupSummary, control: GroupSummary) -> float:
    """Student's t of the difference with the pooled deviation (> 0)."""
    deviation = pooled_standard_deviation(treated, control)
    if deviation == 0:
        raise InvalidInput("standard_deviation", "must not be zero in both groups")
    n1, n2 = treated.observations, control.observations
    return (treated.mean - control.mean) / deviation * math.sqrt(n1 * n2 / (n1 + n2))


def deviation_of_differences(deviation1: float, deviation2: float, correlation: float) -> float:
    """Standard deviation of paired differences, sqrt(s1^2 + s2^2 - 2 r s1 s2).

    Cochrane Handbook 5.1, section 16.4.6.
    """
    if min(deviation1, deviation2) < 0:
        raise InvalidInput("deviation", "must not be below zero")
    if not -1 <= correlation <= 1:
        raise InvalidInput("correlation", "must lie between -1 and 1")
    # (s1 - s2)^2 + 2 (1 - r) s1 s2: no negative root for r near one.
    difference = deviation1 - deviation2
    return math.sqrt(difference * difference + 2 * (1 - correlation) * deviation1 * deviation2)


def paired_mean_difference(
    difference: float, deviation_of_difference: float, pairs: float
) -> EffectEstimate | NoEffect:
    """A mean of paired differences with variance s^2/n (cross-over trials; Handbook 5.1, section 16.4)."""
    require_finite(difference=difference, deviation_of_difference=deviation_of_difference, pairs=pairs)
    if pairs < 2:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    return estimate_or_reason(difference, deviation_of_difference * deviation_of_difference / pairs)


def paired_standardised_mean_difference(
    treated: GroupSummary, control: GroupSummary, correlation: float
) -> EffectEstimate | NoEffect:
    """A cross-over trial's difference over sqrt((s1^2 + s2^2)/2), variance (1/n + d^2/(2n)) 2 (1 - r).

    Cochrane Handbook 5.1, section 16.4.6.2. Both groups are the same n people; no small-sample correction.
    """
    if treated.observations != control.observations:
        raise InvalidInput("observations", "must be the same people in both periods")
    if not -1 <= correlation <= 1:
        raise InvalidInput("correlation", "must lie between -1 and 1")
    n = treated.observations
    if n < 2:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    deviation = math.hypot(treated.standard_deviation, control.standard_deviation) / math.sqrt(2)
    if deviation == 0:
        return NoEffect(Reason.ZERO_DEVIATION)
    d = (treated.mean - control.mean) / deviation
    variance = (1 / n + d * d / (2 * n)) * 2 * (1 - correlation)
    return estimate_or_reason(d, variance, (("deviation-of-one-period", deviation),))
