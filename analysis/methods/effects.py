"""An effect and its variance, and what can be done to any effect whatever its metric.

The rules that make effects are beside this file, by what they start from: ``effects_proportions``,
``effects_means``, ``effects_correlations``, ``effects_regression`` (with ``effects_bounds`` for missing
covariances) and ``effects_conversions``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from .effects_vocabulary import Reason
from .errors import InvalidInput


@dataclass(frozen=True, slots=True)
class EffectEstimate:
    """An effect, its sampling variance (> 0, in squared units of the effect) and the values on the way to it."""

    value: float
    variance: float
    steps: tuple[tuple[str, float], ...] = ()

    @property
    def standard_error(self) -> float:
        """Square root of the variance."""
        return math.sqrt(self.variance)


@dataclass(frozen=True, slots=True)
class NoEffect:
    """A stated result: the input is valid, but there is no effect, and ``reason`` says why."""

    reason: Reason


def require_finite(**arguments: float) -> None:
    """Raise :class:`InvalidInput` naming the first argument that is not a finite number."""
    for field, value in arguments.items():
        if not math.isfinite(value):
            raise InvalidInput(field, "must be a finite number")


def require_positive(**arguments: float) -> None:
    """Raise :class:`InvalidInput` naming the first argument that is not a finite number above zero."""
    for field, value in arguments.items():
        if not (math.isfinite(value) and value > 0):
            raise InvalidInput(field, "must be a finite number above zero")


def estimate_or_reason(
    value: float, variance: float, steps: tuple[tuple[str, float], ...] = ()
) -> EffectEstimate | NoEffect:
    """The effect, unless the arithmetic left the range of floating point or its variance vanished."""
    if not (math.isfinite(value) and math.isfinite(variance)):
        return NoEffect(Reason.OUTSIDE_NUMERIC_RANGE)
    if variance <= 0.0:
        return NoEffect(Reason.ZERO_VARIANCE)
    return EffectEstimate(value, variance, steps)


def design_effect(average_cluster_size: float, intraclass_correlation: float) -> float:
    """How much larger a variance is for assigning clusters rather than units: 1 + (M - 1) ICC.

    Kish (1965); Cochrane Handbook 5.1, section 16.3.4. One for clusters of one or an ICC of zero, M at most.

    Raises
    ------
    InvalidInput
        When the size is below one or the correlation outside [0, 1].
    """
    if not (math.isfinite(average_cluster_size) and average_cluster_size >= 1):
        raise InvalidInput("average_cluster_size", "must be at least one")
    if not 0 <= intraclass_correlation <= 1:
        raise InvalidInput("intraclass_correlation", "must lie between zero and one")
    return 1.0 + (average_cluster_size - 1.0) * intraclass_correlation


def inflate_for_clusters(
    effect: EffectEstimate, average_cluster_size: float, intraclass_correlation: float
) -> EffectEstimate:
    """The effect with its variance times the design effect, for a paper that ignored its clusters."""
    inflation = design_effect(average_cluster_size, intraclass_correlation)
    return EffectEstimate(effect.value, effect.variance * inflation, (*effect.steps, ("design-effect", inflation)))


def align_sign(effect: EffectEstimate, *, higher_is_better: bool) -> EffectEstimate:
    """The effect with its sign turned so that positive is good; unchanged when higher is better."""
    return effect if higher_is_better else replace(effect, value=-effect.value)
