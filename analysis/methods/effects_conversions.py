"""From one metric to another, with the variance carried along.

Each conversion assumes a distribution (normal or logistic outcomes behind a dichotomy); Borenstein, Hedges,
Higgins and Rothstein 2009, chapter 7.
"""

from __future__ import annotations

import math

from .effects import EffectEstimate, NoEffect, estimate_or_reason, require_finite
from .effects_vocabulary import Reason
from .errors import InvalidInput

_DEVIATIONS_PER_LOG_ODDS = math.sqrt(3.0) / math.pi


def _check(variance: float) -> None:
    if not (math.isfinite(variance) and variance > 0):
        raise InvalidInput("variance", "must be a finite number above zero")


def log_odds_ratio_to_difference(log_odds_ratio: float, variance: float) -> EffectEstimate | NoEffect:
    """d = ln OR sqrt(3)/pi, variance times 3/pi^2 (Hasselblad and Hedges 1995)."""
    _check(variance)
    require_finite(log_odds_ratio=log_odds_ratio)
    return estimate_or_reason(log_odds_ratio * _DEVIATIONS_PER_LOG_ODDS, variance * _DEVIATIONS_PER_LOG_ODDS**2)


def difference_to_log_odds_ratio(difference: float, variance: float) -> EffectEstimate | NoEffect:
    """ln OR = d pi/sqrt(3), variance times pi^2/3 (Hasselblad and Hedges 1995)."""
    _check(variance)
    require_finite(difference=difference)
    return estimate_or_reason(difference / _DEVIATIONS_PER_LOG_ODDS, variance / _DEVIATIONS_PER_LOG_ODDS**2)


def correlation_to_difference(correlation: float, variance: float) -> EffectEstimate | NoEffect:
    """d = 2r / sqrt(1 - r^2), variance 4V / (1 - r^2)^3; none for |r| = 1."""
    _check(variance)
    if not -1 <= correlation <= 1:
        raise InvalidInput("correlation", "must lie between -1 and 1")
    rest = (1 - correlation) * (1 + correlation)
    if rest == 0:
        return NoEffect(Reason.PERFECT_CORRELATION)
    return estimate_or_reason(2 * correlation / math.sqrt(rest), 4 * variance / (rest * rest * rest))


def difference_to_correlation(
    difference: float, variance: float, *, group_sizes: tuple[float, float] | None = None
) -> EffectEstimate | NoEffect:
    """r = d / sqrt(d^2 + a), variance a^2 V / (d^2 + a)^3 with a = (n1 + n2)^2/(n1 n2).

    ``group_sizes`` = (n1, n2), both above zero; when they are not known the groups are taken as equal, a = 4.
    """
    _check(variance)
    require_finite(difference=difference)
    a = 4.0
    if group_sizes is not None:
        n1, n2 = group_sizes
        if min(n1, n2) <= 0:
            raise InvalidInput("group_sizes", "must be above zero")
        a = (n1 + n2) ** 2 / (n1 * n2)
    length = math.hypot(difference, math.sqrt(a))
    rest = math.sqrt(a) / length
    # a^2/(d^2 + a)^3 = rest^4 / length^2, which does not overflow.
    return estimate_or_reason(difference / length, variance * (rest**2 / length) ** 2, (("a", a),))


def correlation_to_fisher_z(correlation: float, variance: float) -> EffectEstimate | NoEffect:
    """z = atanh r, variance V / (1 - r^2)^2 by the delta method; none for |r| = 1."""
    _check(variance)
    if not -1 <= correlation <= 1:
        raise InvalidInput("correlation", "must lie between -1 and 1")
    rest = (1 - correlation) * (1 + correlation)
    if rest == 0:
        return NoEffect(Reason.PERFECT_CORRELATION)
    return estimate_or_reason(math.atanh(correlation), variance / (rest * rest))


def fisher_z_to_correlation(z: float, variance: float) -> EffectEstimate | NoEffect:
    """r = tanh z, variance V (1 - r^2)^2 by the delta method."""
    _check(variance)
    require_finite(z=z)
    # 1 - tanh^2 = 1/cosh^2; beyond 350 cosh overflows and the variance is zero anyway.
    slope = 1 / math.cosh(z) ** 2 if abs(z) < 350 else 0.0
    return estimate_or_reason(math.tanh(z), variance * slope * slope)


def percentage_change(log_effect: float) -> float:
    """The exact percentage change 100 (e^b - 1) of a change b in the logarithm; b below 700."""
    if not log_effect < 700:
        raise InvalidInput("log_effect", "must be a number below 700")
    return 100.0 * math.expm1(log_effect)
