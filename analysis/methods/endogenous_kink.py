"""Endogenous kink: a funnel that is straight where selection does not bite and leans where it does.

Bom & Rachinger 2019 (*Research Synthesis Methods* 10): estimates precise enough to be significant anyway are reported
whatever they say; below that precision the reported mean rises with the standard error. With weights 1/SE²,

    y = α + δ(SE − a)·1(SE ≥ a) + u

The kink a comes from a first-stage estimate α₁ of the effect, by conditional PET-PEESE, and the between-study variance
σ² = max(0, k(RSS/(k−2) − 1)/Σ(1/SE²)) of that regression: the lower 95 % limit of what an estimate with standard error
a may say is 1.96·a, so

    a = (α₁² − (1.96σ)²)/(2·1.96·α₁)   if α₁ > 1.96σ, else 0

A kink below the smallest standard error leaves FAT-PET; one above the largest leaves the mean alone. A negative α₁ is
the mirror image. The divisor k−2 in σ² counts the coefficients of the first stage.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput, NotEstimable
from .inputs import FloatArray, check_level, effects_and_variances, scaled
from .small_study_tests import ConditionalEstimate, conditional_pet_peese
from .weighted_regression import Coefficient, coefficient, weighted_regression

CRITICAL = 1.96

FLAGS = {
    "kink-below-every-standard-error": "The kink lies below every standard error: the fit is the funnel asymmetry "
    "regression.",
    "kink-above-every-standard-error": "The kink lies above every standard error: the fit is the plain weighted mean.",
    "no-residual-dispersion": "The fit passes through every estimate, so nothing is left to judge its coefficients by.",
    "fewer-than-ten-estimates": "There are fewer than ten estimates: the kink is then hardly determined.",
}

FEW = 10


@dataclass(frozen=True, slots=True, eq=False)
class EndogenousKink:
    """The kinked funnel.

    effect : α, the mean free of selection, in the unit of the effects, t with k−2 (k−1 for the mean alone) degrees.
    slope : δ, or why there is none.  kink : a, in the unit of the effects.  n_above : standard errors above it.
    first_stage : conditional PET-PEESE, and `first_stage_variance` its σ²; None where the kink was given.
    dispersion : weighted residual sum of squares over its degrees of freedom.
    """

    effect: Coefficient
    slope: Coefficient | NotEstimable
    kink: float
    n_above: int
    first_stage: ConditionalEstimate | None
    first_stage_variance: float | None
    dispersion: float
    k: int
    converged: bool
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def endogenous_kink(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    kink: float | None = None,
    level: float = 0.95,
) -> EndogenousKink | NotEstimable:
    """Fit the kinked funnel (Bom & Rachinger 2019); the module docstring has the equations.

    effects, variances : (k,) arrays as for `pool_effects`.
    kink : a standard error, at least 0, to use instead of the estimated kink.

    NotEstimable with fewer than three estimates or where all standard errors are equal. When only one standard error
    lies above the kink the slope takes up that estimate and the mean is that of the others. Raises InvalidInput.
    """
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    if kink is not None and not 0.0 <= kink < np.inf:
        raise InvalidInput("kink", f"must be a standard error, at least 0, not {kink}")
    k = y.size
    if k < 3:
        return NotEstimable("An endogenous kink needs at least three estimates.", k)
    first: ConditionalEstimate | None = None
    variance: float | None = None
    if kink is None:
        found = conditional_pet_peese(y, v, level=level)
        if isinstance(found, NotEstimable):
            return found
        first = found
        used = first.peese if first.chosen == "peese" else first.pet
        variance = _first_stage_variance(v, used.residual_dispersion)
        kink = kink_of(first.effect.value, variance)
    return _fit(y, v, kink, first, variance, level)


def kink_of(first_stage_effect: float, first_stage_variance: float) -> float:
    """Kink a from the first stage (Bom & Rachinger 2019), in the unit of the effects."""
    size = abs(first_stage_effect)
    reach = CRITICAL * float(np.sqrt(first_stage_variance))
    if size <= reach:
        return 0.0
    # (size² − reach²)/(2·1.96·size) with the difference of squares as a product: neither overflows nor cancels.
    return (size - reach) * (1.0 + reach / size) / (2.0 * CRITICAL)


def _first_stage_variance(v: FloatArray, dispersion: float) -> float:
    smallest = float(v.min())
    mean_weight = float((smallest / v).mean())
    return max(0.0, (dispersion - 1.0) * smallest / mean_weight)


def _fit(
    y: FloatArray,
    v: FloatArray,
    kink: float,
    first: ConditionalEstimate | None,
    variance: float | None,
    level: float,
) -> EndogenousKink | NotEstimable:
    data = scaled(y, v)
    errors = np.sqrt(data.variances)
    place = kink / data.unit
    k = y.size
    flags = ["fewer-than-ten-estimates"] if k < FEW else []
    columns = [np.ones(k)]
    if place >= float(errors.max()):
        flags.append("kink-above-every-standard-error")
    elif place <= float(errors.min()):
        flags.append("kink-below-every-standard-error")
        columns.append(errors)
    else:
        columns.append(np.maximum(0.0, errors - place))
    fit = weighted_regression(data.effects, np.column_stack(columns), 1.0 / data.variances)
    if isinstance(fit, NotEstimable):
        return fit
    if fit.residual_q == 0.0:
        flags.append("no-residual-dispersion")
    df = float(fit.degrees_of_freedom)
    standard = np.sqrt(fit.dispersion * np.diag(fit.covariance))
    mean = data.origin + data.unit * float(fit.coefficients[0])
    return EndogenousKink(
        effect=coefficient(mean, data.unit * float(standard[0]), df, level),
        slope=(
            coefficient(float(fit.coefficients[1]), float(standard[1]), df, level)
            if len(columns) == 2
            else NotEstimable("No standard error lies above the kink.", k)
        ),
        kink=kink,
        n_above=int((errors > place).sum()),
        first_stage=first,
        first_stage_variance=variance,
        dispersion=fit.dispersion,
        k=k,
        converged=True,
        flags=tuple(flags),
    )
