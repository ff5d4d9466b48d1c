"""Is the effect itself changing, as distinct from our estimate of it settling down?

A trail moves because evidence accumulates. Drift is another thing: effects measured in later years are truly larger or
smaller. Regression of the estimates on the year in the middle of the data of each,

    y_i = b0 + b1(year_i − centre) + u_i + e_i,   Var e_i = v_i,   Var u_i = τ²

by the common effect (τ² = 0), or with τ² by DerSimonian-Laird or restricted maximum likelihood and normal or
Hartung-Knapp intervals (`mixed_regression` has the equations). R² = 1 − τ²(with year)/τ²(without), not below 0
(Raudenbush 1994).

Years go with designs, places and outcomes too; a slope does not say why.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput, NotEstimable
from .inputs import check_choice, check_level, effects_and_variances, float_array
from .mixed_regression import HETEROGENEITY, INTERVALS, MixedRegression, mixed_regression
from .weighted_regression import Coefficient, coefficient

FLAGS = {
    "fewer-than-ten-estimates": "There are fewer than ten estimates: a slope is then hardly determined.",
    "few-years": "The estimates come from fewer than four different years.",
    "between-study-variance-at-zero": "The estimate of the unexplained between-study variance is 0.",
    "several-likelihood-maxima": "The restricted likelihood has more than one maximum.",
    "no-residual-dispersion": "The line passes through every estimate, so Hartung-Knapp's interval has no width.",
}

FEW = 10
FEW_YEARS = 4


@dataclass(frozen=True, slots=True, eq=False)
class Drift:
    """The line through the years.

    per_year : b1, change of the effect in a year.  at_centre : b0, the effect in the year `centre`.
    first_year, last_year : of the data; `at_first`, `at_last` the fitted effects there, `change` between them.
    tau2, tau2_without : unexplained between-study variance with and without the year.  r_squared : share the year
        explains, NotEstimable when there was none to explain.
    residual_q, residual_q_df, residual_q_p : of the common-effect line.
    """

    per_year: Coefficient
    at_centre: Coefficient
    centre: float
    first_year: float
    last_year: float
    at_first: float
    at_last: float
    change: float
    tau2: float
    tau2_without: float
    r_squared: float | NotEstimable
    residual_q: float
    residual_q_df: int
    residual_q_p: float
    heterogeneity: str
    interval: str
    level: float
    k: int
    converged: bool
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def drift(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    years: npt.ArrayLike,
    *,
    heterogeneity: str = "restricted-maximum-likelihood",
    interval: str = "hartung-knapp",
    centre: float | None = None,
    level: float = 0.95,
) -> Drift | NotEstimable:
    """Regress the estimates on the mid-year of their data.

    Parameters
    ----------
    effects, variances : (k,) arrays as for `pool_effects`
    years : (k,) mid-years of the data, fractions allowed
    heterogeneity : `common-effect`, `dersimonian-laird` or `restricted-maximum-likelihood`
    interval : `normal` or `hartung-knapp`
    centre : year at which b0 is stated; None for the mean of the years

    NotEstimable with fewer than three estimates or when all come from one year. Raises InvalidInput, UnknownChoice.
    """
    check_choice("heterogeneity", heterogeneity, HETEROGENEITY)
    check_choice("interval", interval, INTERVALS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    year = float_array("years", years)
    if year.size != y.size:
        raise InvalidInput("years", f"has {year.size} values for {y.size} effects")
    if centre is not None and not np.isfinite(centre):
        raise InvalidInput("centre", "must be finite")
    k = y.size
    if k < 3:
        return NotEstimable("A change over the years needs at least three estimates.", k)
    middle = float(year.mean()) if centre is None else float(centre)
    spread = float(np.ptp(year))
    if not spread > 1e-9 * max(1.0, float(np.abs(year).max())):
        return NotEstimable("All estimates come from the same year.", k)
    # Fitted about the mean year, where intercept and slope hardly correlate, whatever centre is asked for.
    about = float(year.mean())
    columns = np.column_stack([np.ones(k), (year - about) / spread])
    fit = mixed_regression(y, v, columns, heterogeneity=heterogeneity, interval=interval, level=level)
    plain = mixed_regression(y, v, np.ones((k, 1)), heterogeneity=heterogeneity, interval=interval, level=level)
    if isinstance(fit, NotEstimable):
        return fit
    if isinstance(plain, NotEstimable):
        return plain
    slope = fit.coefficients[1]
    per_year = Coefficient(
        slope.value / spread,
        slope.standard_error / spread,
        slope.statistic,
        slope.p,
        slope.degrees_of_freedom,
        slope.low / spread,
        slope.high / spread,
        level,
    )
    at_first = fit.coefficients[0].value + slope.value * (float(year.min()) - about) / spread
    at_last = fit.coefficients[0].value + slope.value * (float(year.max()) - about) / spread
    explained: float | NotEstimable
    if plain.tau2 > 0.0:
        explained = max(0.0, 1.0 - fit.tau2 / plain.tau2)
    else:
        explained = NotEstimable("There is no between-study variance for the year to explain.", k)
    return Drift(
        per_year=per_year,
        at_centre=_intercept_at((middle - about) / spread, fit, level),
        centre=middle,
        first_year=float(year.min()),
        last_year=float(year.max()),
        at_first=at_first,
        at_last=at_last,
        change=at_last - at_first,
        tau2=fit.tau2,
        tau2_without=plain.tau2,
        r_squared=explained,
        residual_q=fit.residual_q,
        residual_q_df=fit.residual_q_df,
        residual_q_p=fit.residual_q_p,
        heterogeneity=heterogeneity,
        interval=interval,
        level=level,
        k=k,
        converged=fit.converged and plain.converged,
        flags=_flags(fit, int(np.unique(year).size), heterogeneity, interval),
    )


def _intercept_at(place: float, fit: MixedRegression, level: float) -> Coefficient:
    """The line at a place on the scaled axis, with its error from the covariance of intercept and slope."""
    intercept, slope = fit.coefficients
    at = np.array([1.0, place])
    variance = float(at @ fit.covariance @ at)
    return coefficient(
        intercept.value + place * slope.value, float(np.sqrt(max(0.0, variance))), intercept.degrees_of_freedom, level
    )


def _flags(fit: MixedRegression, n_years: int, heterogeneity: str, interval: str) -> tuple[str, ...]:
    flags = []
    if fit.k < FEW:
        flags.append("fewer-than-ten-estimates")
    if n_years < FEW_YEARS:
        flags.append("few-years")
    if heterogeneity != "common-effect" and fit.tau2 == 0.0:
        flags.append("between-study-variance-at-zero")
    if fit.maxima > 1:
        flags.append("several-likelihood-maxima")
    if interval == "hartung-knapp" and fit.hartung_knapp_factor == 0.0:
        flags.append("no-residual-dispersion")
    return tuple(flags)
