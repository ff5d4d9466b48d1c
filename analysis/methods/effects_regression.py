"""Partial effects of a regression and their scales.

A regression has terms linear, square, cube or logarithm in the exposure x, or an interaction x times w. The
effect of the exposure is the derivative c'b at a point, never the linear coefficient alone; its variance c'Vc is
in ``effects_bounds``, since the covariances in V are rarely printed.
"""

from __future__ import annotations

import math
from typing import Final

from .effects import EffectEstimate, NoEffect, estimate_or_reason, require_finite
from .errors import InvalidInput, UnknownChoice

TERM_FORMS: Final = ("linear", "square", "cube", "logarithm", "interaction")


def term_derivative(form: str, *, exposure: float | None = None, moderator: float | None = None) -> float:
    """The derivative of one term with respect to the exposure at a point: an element of c.

    1 for linear, 2x for square, 3x^2 for cube, 1/x for logarithm (x > 0), w for an interaction.

    Raises
    ------
    InvalidInput
        When the form needs a value that is ``None``, or a logarithm meets x <= 0.
    """
    if form == "linear":
        return 1.0
    if form == "interaction":
        if moderator is None:
            raise InvalidInput("moderator", "is needed for an interaction")
        return moderator
    if form not in TERM_FORMS:
        raise UnknownChoice("form", form, TERM_FORMS)
    if exposure is None:
        raise InvalidInput("exposure", f"is needed for a {form} term")
    if form == "square":
        return 2.0 * exposure
    if form == "cube":
        return 3.0 * exposure * exposure
    if exposure <= 0:
        raise InvalidInput("exposure", "must be above zero for a logarithm")
    return 1.0 / exposure


def scaled_slope(
    slope: float,
    variance: float,
    factor: float,
    *,
    outcome_mean: float | None = None,
    outcome_mean_variance: float = 0.0,
) -> EffectEstimate | NoEffect:
    """A slope times a fixed factor, relative to the outcome's mean when one is given.

    value = factor slope / mean; variance = (factor/mean)^2 V + value^2 V(mean)/mean^2, the delta method with the
    regressors held fixed: a least-squares slope and the outcome's mean are then uncorrelated.

    Parameters
    ----------
    slope, variance : the slope and its variance, >= 0.
    factor : units of the new metric per unit of the slope.
    outcome_mean : not zero.
    outcome_mean_variance : sampling variance of that mean, >= 0; zero treats it as fixed.
    """
    require_finite(slope=slope, variance=variance, factor=factor, outcome_mean_variance=outcome_mean_variance)
    if variance < 0 or outcome_mean_variance < 0:
        raise InvalidInput("variance", "must not be below zero")
    if outcome_mean is not None:
        if outcome_mean == 0 or not math.isfinite(outcome_mean):
            raise InvalidInput("outcome_mean", "must be a finite number other than zero")
        factor = factor / outcome_mean
    value = factor * slope
    spread = factor * factor * variance
    if outcome_mean is not None and outcome_mean_variance > 0:
        relative = value / outcome_mean
        spread += relative * relative * outcome_mean_variance
    return estimate_or_reason(value, spread, (("factor", factor),))


def elasticity(
    slope: float,
    variance: float,
    exposure_mean: float,
    outcome_mean: float,
    *,
    outcome_mean_variance: float = 0.0,
) -> EffectEstimate | NoEffect:
    """b x/y at means of a level-level regression; see :func:`scaled_slope`."""
    return scaled_slope(
        slope, variance, exposure_mean, outcome_mean=outcome_mean, outcome_mean_variance=outcome_mean_variance
    )


def semi_elasticity(
    slope: float, variance: float, outcome_mean: float, *, outcome_mean_variance: float = 0.0
) -> EffectEstimate | NoEffect:
    """b/y at the mean of a level-level regression; see :func:`scaled_slope`."""
    return scaled_slope(slope, variance, 1.0, outcome_mean=outcome_mean, outcome_mean_variance=outcome_mean_variance)


def standardised_coefficient(
    slope: float, variance: float, exposure_deviation: float, outcome_deviation: float
) -> EffectEstimate | NoEffect:
    """b s_x/s_y, both deviations (> 0) taken as fixed."""
    if not (exposure_deviation > 0 and outcome_deviation > 0):
        raise InvalidInput("deviation", "must be above zero")
    return scaled_slope(slope, variance, exposure_deviation / outcome_deviation)
