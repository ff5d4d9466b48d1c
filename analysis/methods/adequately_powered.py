"""The weighted average of the adequately powered estimates, and how much power the estimates have.

An estimate is adequately powered (80 % at two-sided 5 %) when its standard error is at most |m|/2.8, m the
common-effect mean; 2.8 ≈ 1.96 + 0.84. WAAP is the mean of those alone, with the standard error of unrestricted weighted
least squares; where there are none, that of all estimates (Stanley, Doucouliagos & Ioannidis 2017).

Power of an estimate to find a true effect m: 1 − Φ(1.96 − |m|/SE) (same source), or, counting both tails exactly,
Φ(|m|/SE − z) + Φ(−z − |m|/SE) with z the normal quantile.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

from .errors import NotEstimable
from .inputs import BoolArray, FloatArray, check_level, effects_and_variances
from .pooling import PooledEffect, pool_effects

POWER_DIVISOR = 2.8
CRITICAL = 1.96

FLAGS = {
    "no-adequately-powered-estimate": "No estimate is adequately powered: the mean of all of them is given.",
    "one-adequately-powered-estimate": "One estimate is adequately powered: it is the answer, with its own standard "
    "error.",
}


@dataclass(frozen=True, slots=True, eq=False)
class AdequatelyPowered:
    """WAAP and the power of the estimates.

    common_effect : m.  threshold : |m|/2.8.  adequate : (k,) whether SE ≤ threshold.  n_adequate : how many.
    value : mean of the adequately powered, or of all where there are none.
    inverse_variance_standard_error : 1/√Σ(1/v).  pooled : unrestricted weighted least squares, with its t interval; its
        standard error is the published one, and with a single estimate is that estimate's own.
    power : (k,) one-tailed formula.  median_power, median_power_two_tailed : medians over all estimates.
    """

    common_effect: float
    threshold: float
    adequate: BoolArray
    n_adequate: int
    value: float
    inverse_variance_standard_error: float
    pooled: PooledEffect
    power: FloatArray
    median_power: float
    median_power_two_tailed: float
    k: int
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def power_two_tailed(effect: float, standard_errors: FloatArray, alpha: float = 0.05) -> FloatArray:
    """Chance that a two-sided level-α normal test of each estimate rejects 0 when the true effect is `effect`."""
    z = -float(special.ndtri(0.5 * alpha))
    signal = abs(effect) / standard_errors
    power: FloatArray = special.ndtr(signal - z) + special.ndtr(-z - signal)
    return power


def adequately_powered(
    effects: npt.ArrayLike, variances: npt.ArrayLike, *, level: float = 0.95
) -> AdequatelyPowered | NotEstimable:
    """Weighted average of the adequately powered, and median power (Stanley, Doucouliagos & Ioannidis 2017).

    effects, variances : (k,) arrays as for `pool_effects`. NotEstimable when there are no estimates. With a common
    effect of exactly 0 no estimate is adequately powered. Raises InvalidInput.
    """
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    common = pool_effects(y, v, model="common-effect", interval="normal", level=level)
    if isinstance(common, NotEstimable):
        return common
    errors = np.sqrt(v)
    threshold = abs(common.value) / POWER_DIVISOR
    adequate = errors <= threshold
    count = int(adequate.sum())
    used = adequate if count else np.ones(y.size, dtype=np.bool_)
    pooled = pool_effects(y[used], v[used], model="unrestricted-weighted-least-squares", interval="t", level=level)
    if isinstance(pooled, NotEstimable):
        return pooled
    smallest = float(v[used].min())
    flags = {0: ("no-adequately-powered-estimate",), 1: ("one-adequately-powered-estimate",)}.get(count, ())
    power: FloatArray = special.ndtr(abs(common.value) / errors - CRITICAL)
    return AdequatelyPowered(
        common_effect=common.value,
        threshold=threshold,
        adequate=adequate,
        n_adequate=count,
        value=pooled.value,
        inverse_variance_standard_error=float(np.sqrt(smallest / (smallest / v[used]).sum())),
        pooled=pooled,
        power=power,
        median_power=float(np.median(power)),
        median_power_two_tailed=float(np.median(power_two_tailed(common.value, errors))),
        k=y.size,
        flags=flags,
    )
