"""Correlations, partial correlations and Fisher's z."""

from __future__ import annotations

import math
from typing import Final

from .effects import EffectEstimate, NoEffect, estimate_or_reason, require_finite
from .effects_vocabulary import Reason
from .errors import InvalidInput, UnknownChoice

PARTIAL_CORRELATION_VARIANCES: Final = ("t-preserving", "asymptotic", "asymptotic-plus-one")
PARTIAL_CORRELATION_FORMS: Final = ("standard", "small-sample")


def _check_correlation(correlation: float) -> None:
    if not -1 <= correlation <= 1:
        raise InvalidInput("correlation", "must lie between -1 and 1")


def correlation_effect(correlation: float, observations: float) -> EffectEstimate | NoEffect:
    """r with variance (1 - r^2)^2 / (n - 1) (Borenstein et al. 2009, chapter 6)."""
    _check_correlation(correlation)
    if observations <= 1:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    rest = (1 - correlation) * (1 + correlation)
    if rest == 0:
        return NoEffect(Reason.PERFECT_CORRELATION)
    return estimate_or_reason(correlation, rest * rest / (observations - 1))


def fisher_z(correlation: float, observations: float) -> EffectEstimate | NoEffect:
    """atanh r with variance 1/(n - 3) (Fisher 1921)."""
    _check_correlation(correlation)
    if abs(correlation) == 1:
        return NoEffect(Reason.PERFECT_CORRELATION)
    if observations <= 3:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    return estimate_or_reason(math.atanh(correlation), 1 / (observations - 3))


def partial_correlation(
    t: float, degrees_of_freedom: float, *, variance: str = "t-preserving", form: str = "standard"
) -> EffectEstimate | NoEffect:
    """r = t / sqrt(t^2 + df) from a regression's t statistic and residual degrees of freedom.

    Parameters
    ----------
    t : finite.
    degrees_of_freedom : > 0.
    variance : ``t-preserving``: (1 - r^2)/df, for which r over its standard error is t again (Stanley and
        Doucouliagos 2012); ``asymptotic``: (1 - r^2)^2/df and ``asymptotic-plus-one``: (1 - r^2)^2/(df + 1)
        (Aloe and Thompson 2013; compared in van Aert and Goos 2023).
    form : ``standard``, or ``small-sample`` with df + 3 in place of df (Stanley, Doucouliagos and Havranek 2024).
    """
    if variance not in PARTIAL_CORRELATION_VARIANCES:
        raise UnknownChoice("variance", variance, PARTIAL_CORRELATION_VARIANCES)
    if form not in PARTIAL_CORRELATION_FORMS:
        raise UnknownChoice("form", form, PARTIAL_CORRELATION_FORMS)
    require_finite(t=t, degrees_of_freedom=degrees_of_freedom)
    if degrees_of_freedom <= 0:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    df = degrees_of_freedom + 3.0 if form == "small-sample" else degrees_of_freedom
    length = math.hypot(t, math.sqrt(df))
    root = math.sqrt(df) / length
    # 1 - r^2 = df / (t^2 + df), which keeps its digits when t is large.
    rest = root * root
    if variance == "t-preserving":
        spread = rest / df
    elif variance == "asymptotic":
        spread = rest * rest / df
    else:
        spread = rest * rest / (df + 1.0)
    return estimate_or_reason(t / length, spread, (("t", t), ("degrees-of-freedom", degrees_of_freedom)))


def partial_fisher_z(t: float, degrees_of_freedom: float) -> EffectEstimate | NoEffect:
    """atanh of the partial correlation with variance 1/(df - 1) (Fisher 1924).

    atanh(t / sqrt(t^2 + df)) = asinh(t / sqrt(df)), which does not break down when r rounds to one.
    """
    require_finite(t=t, degrees_of_freedom=degrees_of_freedom)
    if degrees_of_freedom <= 1:
        return NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    value = math.asinh(t / math.sqrt(degrees_of_freedom))
    return estimate_or_reason(
        value, 1 / (degrees_of_freedom - 1), (("t", t), ("degrees-of-freedom", degrees_of_freedom))
    )


def t_of_correlation(correlation: float, degrees_of_freedom: float) -> float:
    """The t statistic whose partial correlation this is: r sqrt(df / (1 - r^2)); |r| < 1."""
    _check_correlation(correlation)
    rest = (1 - correlation) * (1 + correlation)
    if rest == 0:
        raise InvalidInput("correlation", "must lie strictly between -1 and 1")
    return correlation * math.sqrt(degrees_of_freedom / rest)


def fisher_z_interval(correlation: float, observations: float, quantile: float) -> tuple[float, float]:
    """The interval for r that comes back from atanh r plus and minus quantile / sqrt(n - 3); |r| < 1, n > 3."""
    centre = math.atanh(correlation)
    half = quantile / math.sqrt(observations - 3)
    return math.tanh(centre - half), math.tanh(centre + half)
