"""How much evidence a question needs, and how much looking again costs.

**Required information** for an effect δ of interest at two-sided α and power 1−β, on the scale of 1/SE²:
((z_{1−α/2} + z_{1−β})/δ)². In participants, two equal groups: continuous outcome 4(z_{1−α/2} + z_{1−β})²σ²/δ²;
proportions with σ² = p̄(1−p̄), δ = p_C − p_E, p̄ = (p_C + p_E)/2.

**Diversity** D² = (V_R − V_C)/V_R, V_C and V_R the variances of the common-effect and the random-effects mean, is how
much of the information heterogeneity takes away; the requirement grows to N/(1 − D²) (Wetterslev, Thorlund, Brok &
Gluud 2009, *BMC Medical Research Methodology* 9:86).

**Iterated logarithm**: by the law of the iterated logarithm z outgrows every fixed bound if one looks often enough, but
not √(2 ln ln I). Z* = Z/√(λ ln ln I), I the cumulative information, is held against the usual normal quantile, λ
between 1 and 2 (Lan, Hu & Cappelleri 2003, *Statistica Sinica* 13). It needs no required information and no schedule of
looks, but it depends on the unit in which information is counted.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy.typing as npt
from scipy import special

from .errors import InvalidInput, NotEstimable
from .inputs import check_level
from .pooling import PooledEffect, pool_effects


@dataclass(frozen=True, slots=True)
class RequiredInformation:
    """What a question needs.

    unadjusted : without heterogeneity.  adjusted : over (1 − D²), or why that has no value.  diversity : D² as given.
    unit : `inverse-variance` (1/SE² of the effect) or `participants` (not rounded up).
    """

    unadjusted: float
    adjusted: float | NotEstimable
    diversity: float
    unit: str
    alpha: float
    power: float
    estimable: Literal[True] = True


def _quantiles(alpha: float, power: float) -> float:
    if not 0.0 < alpha < 1.0:
        raise InvalidInput("alpha", f"must lie between 0 and 1, not {alpha}")
    if not 0.0 < power < 1.0:
        raise InvalidInput("power", f"must lie between 0 and 1, not {power}")
    total = float(special.ndtri(power) - special.ndtri(0.5 * alpha))
    if total <= 0.0:
        raise InvalidInput("power", f"is reached without any information at alpha {alpha}")
    return total


def _required(unadjusted: float, diversity: float, unit: str, alpha: float, power: float) -> RequiredInformation:
    if not 0.0 <= diversity <= 1.0:
        raise InvalidInput("diversity", f"must lie between 0 and 1, not {diversity}")
    adjusted: float | NotEstimable
    if diversity < 1.0:
        adjusted = unadjusted / (1.0 - diversity)
    else:
        adjusted = NotEstimable("With a diversity of 1 no amount of information is enough.", 0)
    return RequiredInformation(unadjusted, adjusted, diversity, unit, alpha, power)


def required_information(
    effect: float, *, alpha: float = 0.05, power: float = 0.80, diversity: float = 0.0
) -> RequiredInformation:
    """Information 1/SE² needed to find an effect, in the inverse squared unit of the effect.

    effect : the smallest of interest, not 0.  diversity : D², from `PooledEffect.diversity` or a guess.
    Raises InvalidInput.
    """
    root = _quantiles(alpha, power) / _not_zero("effect", effect)
    return _required(root * root, diversity, "inverse-variance", alpha, power)


def required_participants_continuous(
    difference: float, standard_deviation: float, *, alpha: float = 0.05, power: float = 0.80, diversity: float = 0.0
) -> RequiredInformation:
    """Participants in two equal groups together, for a difference in means; both in the unit of the outcome.

    Raises InvalidInput unless the difference is not 0 and the standard deviation is positive.
    """
    if not 0.0 < standard_deviation < math.inf:
        raise InvalidInput("standard_deviation", f"must be positive, not {standard_deviation}")
    root = 2.0 * _quantiles(alpha, power) * (standard_deviation / _not_zero("difference", difference))
    return _required(root * root, diversity, "participants", alpha, power)


def required_participants_proportions(
    control_risk: float,
    relative_risk_reduction: float,
    *,
    alpha: float = 0.05,
    power: float = 0.80,
    diversity: float = 0.0,
) -> RequiredInformation:
    """Participants in two equal groups together, for a relative reduction of a risk (negative for an increase).

    Raises InvalidInput unless both risks lie between 0 and 1 and differ.
    """
    if not 0.0 < control_risk < 1.0:
        raise InvalidInput("control_risk", f"must lie between 0 and 1, not {control_risk}")
    difference = control_risk * _not_zero("relative_risk_reduction", relative_risk_reduction)
    treated_risk = control_risk - difference
    if not 0.0 <= treated_risk <= 1.0:
        raise InvalidInput("relative_risk_reduction", f"gives a risk of {treated_risk} under treatment")
    mean = 0.5 * (control_risk + treated_risk)
    root = 2.0 * _quantiles(alpha, power) * (math.sqrt(mean * (1.0 - mean)) / difference)
    return _required(root * root, diversity, "participants", alpha, power)


def _not_zero(name: str, value: float) -> float:
    if not math.isfinite(value) or abs(value) < 1e-100:
        raise InvalidInput(name, f"must not be 0, not {value}")
    return value


@dataclass(frozen=True, slots=True)
class InformationSoFar:
    """Information of a pooled answer against that required.

    information : 1/SE² of the common-effect mean, 1/V_C.  diversity : D² of the pooled answer.
    required : with that diversity.  fraction : information over the adjusted requirement; since V_C = V_R(1 − D²) that
        is 1/V_R over the unadjusted one, which is how `spending.monitor` gets it from random-effects standard errors.
    """

    information: float
    diversity: float
    required: RequiredInformation
    fraction: float
    pooled: PooledEffect
    estimable: Literal[True] = True


def information_so_far(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    smallest_effect: float,
    *,
    heterogeneity: str = "restricted-maximum-likelihood",
    alpha: float = 0.05,
    power: float = 0.80,
    level: float = 0.95,
) -> InformationSoFar | NotEstimable:
    """How much of the required information the estimates hold, heterogeneity allowed for by D² (Wetterslev et al.
    2009).

    effects, variances : (k,) arrays as for `pool_effects`.  smallest_effect : of interest, in their unit, not 0.
    NotEstimable when there are no estimates. Raises InvalidInput, UnknownChoice.
    """
    check_level(level)
    pooled = pool_effects(
        effects, variances, model="random-effects", heterogeneity=heterogeneity, interval="normal", level=level
    )
    if isinstance(pooled, NotEstimable):
        return pooled
    common = pool_effects(effects, variances, model="common-effect", interval="normal", level=level)
    if isinstance(common, NotEstimable):
        return common
    required = required_information(smallest_effect, alpha=alpha, power=power, diversity=min(1.0, pooled.diversity))
    return InformationSoFar(
        information=1.0 / common.standard_error**2,
        diversity=pooled.diversity,
        required=required,
        fraction=1.0 / pooled.standard_error**2 / required.unadjusted,
        pooled=pooled,
    )


@dataclass(frozen=True, slots=True)
class IteratedLogarithm:
    """Z* = Z/√(λ ln ln I).

    z : as given.  penalty : √(λ ln ln I).  adjusted_z : Z*.  p : its two-sided normal p.
    beyond_bound : |Z*| at or beyond the two-sided quantile for `alpha`.
    flags : `penalty-below-one` where I is so small that Z* is larger than Z.
    """

    z: float
    information: float
    penalty: float
    adjusted_z: float
    p: float
    beyond_bound: bool
    scale: float
    alpha: float
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def iterated_logarithm(
    z: float, information: float, *, scale: float = 2.0, alpha: float = 0.05
) -> IteratedLogarithm | NotEstimable:
    """z penalised for having been looked at ever since the first paper (Lan, Hu & Cappelleri 2003).

    z : of the pooled answer.  information : cumulative, 1/SE².  scale : λ, greater than 0; 2 is the law's own.
    NotEstimable while the information is not above e, where ln ln I is not positive. Raises InvalidInput.
    """
    if not math.isfinite(z):
        raise InvalidInput("z", "must be finite")
    if not 0.0 < information < math.inf:
        raise InvalidInput("information", f"must be positive, not {information}")
    if not 0.0 < scale < math.inf:
        raise InvalidInput("scale", f"must be positive, not {scale}")
    if not 0.0 < alpha < 1.0:
        raise InvalidInput("alpha", f"must lie between 0 and 1, not {alpha}")
    twice = math.log(math.log(information)) if information > 1.0 else 0.0
    if twice <= 1e-12:
        return NotEstimable("The iterated logarithm has no value while the information is not above 2.72.", 0)
    penalty = math.sqrt(scale * twice)
    adjusted = z / penalty
    return IteratedLogarithm(
        z=z,
        information=information,
        penalty=penalty,
        adjusted_z=adjusted,
        p=2.0 * float(special.ndtr(-abs(adjusted))),
        beyond_bound=abs(adjusted) >= -float(special.ndtri(0.5 * alpha)),
        scale=scale,
        alpha=alpha,
        flags=("penalty-below-one",) if penalty < 1.0 else (),
    )
