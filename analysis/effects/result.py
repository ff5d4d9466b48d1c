"""``effect_of``: a reading and a plan in, an effect with its derivation out."""

import math
from dataclasses import dataclass
from typing import Any

from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.effects.groups import of_correlation, of_two_means, of_two_proportions
from analysis.effects.plan import EffectPlan
from analysis.effects.ready_made import of_ready_made_effect
from analysis.effects.regression import of_regression
from analysis.methods.effects import EffectEstimate, inflate_for_clusters
from analysis.methods.effects_vocabulary import Flag, Reason, Rule
from evidence.readings import Cluster, Correlation, Reading, ReadyMadeEffect, Regression, TwoMeans, TwoProportions


@dataclass(frozen=True, slots=True)
class EffectResult:
    """An effect in the plan's metric, or the reason why there is none.

    Attributes
    ----------
    value, standard_error : finite, the error above zero; both ``None`` when not estimable.
    se_low, se_high : the smallest and largest standard error that the printed numbers allow, around
        ``standard_error``; equal to it when they settle it, ``None`` when not estimable. ``se_low`` may be zero.
    flags : codes of :class:`Flag`, in the order in which they arose.
    reason : a code of :class:`Reason`; ``None`` when there is an effect.
    derivation : JSON: ``rule`` and its ``source``, further rules under ``conversions``, the ``inputs`` as
        printed, ``steps`` of name and value, ``flags``, ``sign_flipped``, ``metric`` and ``reason``.
    """

    value: float | None
    standard_error: float | None
    se_low: float | None
    se_high: float | None
    flags: tuple[str, ...]
    reason: str | None
    derivation: dict[str, Any]

    @property
    def is_bounded(self) -> bool:
        """Whether the printed numbers leave the standard error open."""
        return self.se_low is not None and self.se_high is not None and self.se_low < self.se_high


def effect_of(reading: Reading, plan: EffectPlan) -> EffectResult:
    """Turn a reading into an effect in the plan's metric.

    A pure function: the same reading and plan give the same result. What cannot be estimated is a result with a
    reason; nothing is raised for any reading that ``read`` accepts.
    """
    draft = Draft(plan)
    try:
        effect = _with_clusters(_of(reading, draft), reading.cluster, draft)
        if not _is_sound(effect):
            raise NotEstimable(Reason.OUTSIDE_NUMERIC_RANGE)
    except NotEstimable as stop:
        return EffectResult(
            None, None, None, None, _codes(draft), stop.reason.value, _derivation(reading, draft, False, stop.reason)
        )
    flipped = plan.align_sign and plan.good_direction == "lower"
    if flipped:
        draft.rules.append(Rule.SIGN_ALIGNMENT)
    # 0.0 - x rather than -x: an effect of zero has no sign to turn.
    value = 0.0 - effect.value if flipped else effect.value
    return EffectResult(
        value,
        effect.standard_error,
        effect.low,
        effect.high,
        _codes(draft),
        None,
        _derivation(reading, draft, flipped, None),
    )


def _of(reading: Reading, draft: Draft) -> Bounded:
    if isinstance(reading, Regression):
        return of_regression(reading, draft)
    if isinstance(reading, ReadyMadeEffect):
        return of_ready_made_effect(reading, draft)
    if isinstance(reading, TwoProportions):
        return of_two_proportions(reading, draft)
    if isinstance(reading, TwoMeans):
        return of_two_means(reading, draft)
    if isinstance(reading, Correlation):
        return of_correlation(reading, draft)
    raise TypeError(f"{type(reading).__name__} is not a reading")


def _with_clusters(effect: Bounded, cluster: Cluster | None, draft: Draft) -> Bounded:
    if cluster is None or cluster.accounted_for:
        return effect
    size, correlation = cluster.average_size, cluster.intraclass_correlation
    if draft.plan.cluster_correction == "none" or size is None or correlation is None:
        draft.flag(Flag.CLUSTERING_NOT_CORRECTED)
        return effect
    before = EffectEstimate(effect.value, effect.standard_error**2)
    inflated = inflate_for_clusters(before, size.number, correlation.number)
    draft.flag(Flag.CLUSTERING_CORRECTED)
    return effect.scaled(draft.take(Rule.DESIGN_EFFECT, inflated))


def _is_sound(effect: Bounded) -> bool:
    numbers = (effect.value, effect.standard_error, effect.low, effect.high)
    # The square of a standard error is a weight's denominator: it must neither vanish nor overflow.
    return (
        all(map(math.isfinite, numbers))
        and effect.low >= 0
        and effect.standard_error**2 > 0
        and 1e-100 < effect.standard_error < 1e100
    )


def _codes(draft: Draft) -> tuple[str, ...]:
    return tuple(flag.value for flag in draft.flags)


def _derivation(reading: Reading, draft: Draft, flipped: bool, reason: Reason | None) -> dict[str, Any]:
    rules = draft.rules
    return {
        "rule": rules[0].value if rules else None,
        "source": rules[0].source if rules else None,
        "conversions": [rule.value for rule in rules[1:]],
        "metric": str(draft.plan.metric),
        "inputs": reading.as_json(),
        "steps": [step for step in draft.steps if _is_writable(step["value"])],
        "flags": [flag.value for flag in draft.flags],
        "sign_flipped": flipped,
        "reason": None if reason is None else reason.value,
    }


def _is_writable(value: float | str) -> bool:
    """Whether a step can stand in JSON, which has no infinity; one may arise on the way to a refusal."""
    return isinstance(value, str) or math.isfinite(value)
