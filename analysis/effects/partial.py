"""Partial correlations from a t statistic, when the standard error behind it may itself be open."""

import math

from analysis.effects.conversions import convert
from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.methods.effects import NoEffect
from analysis.methods.effects_correlations import partial_correlation, partial_fisher_z
from analysis.methods.effects_vocabulary import Flag, Rule
from evidence.readings import Metric

#: Metrics made from a test statistic and its degrees of freedom.
TEST_METRICS = (Metric.PARTIAL_CORRELATION, Metric.FISHER_Z, Metric.CORRELATION)


def of_test_statistic(
    slope: Bounded | None, degrees_of_freedom: float, draft: Draft, *, t: float | None = None
) -> Bounded:
    """The plan's metric from t = slope / standard error (or from ``t``) and the residual degrees of freedom.

    An open standard error opens t and so the effect itself: the effect is then at the chosen standard error,
    flagged, with its values at both ends among the steps.
    """
    if t is None:
        if slope is None:
            raise ValueError("a slope or its t statistic is needed")
        t = slope.value / slope.standard_error
    if draft.plan.metric == Metric.FISHER_Z:
        effect = draft.settled(Rule.PARTIAL_FISHER_Z, partial_fisher_z(t, degrees_of_freedom))
        if slope is not None and slope.low != slope.high:
            draft.flag(Flag.VALUE_DEPENDS_ON_STANDARD_ERROR)
            for end, error in (("smallest", slope.low), ("largest", slope.high)):
                if error > 0:
                    z = math.asinh(slope.value / error / math.sqrt(degrees_of_freedom))
                    draft.step(f"value-at-{end}-standard-error", z)
        return effect
    plan = draft.plan
    variance, form = plan.partial_correlation_variance, plan.partial_correlation_form
    effect = draft.settled(
        Rule.PARTIAL_CORRELATION, partial_correlation(t, degrees_of_freedom, variance=variance, form=form)
    )
    if slope is not None and slope.low != slope.high:
        draft.flag(Flag.VALUE_DEPENDS_ON_STANDARD_ERROR)
        errors = [effect.standard_error]
        for end, error in (("smallest", slope.low), ("largest", slope.high)):
            if error == 0:
                # The limit of a t that grows without end: a perfect correlation, unless there is no slope.
                at_end, error_at_end = math.copysign(1.0, slope.value), 0.0
                if slope.value == 0:
                    continue
            else:
                other = partial_correlation(slope.value / error, degrees_of_freedom, variance=variance, form=form)
                if isinstance(other, NoEffect):
                    raise NotEstimable(other.reason)
                at_end, error_at_end = other.value, other.standard_error
            draft.step(f"value-at-{end}-standard-error", at_end)
            errors.append(error_at_end)
        effect = Bounded(effect.value, effect.standard_error, min(errors), max(errors))
    if plan.metric in (Metric.PARTIAL_CORRELATION, Metric.CORRELATION):
        if plan.metric == Metric.CORRELATION:
            draft.flag(Flag.PARTIAL_AS_CORRELATION)
        return effect
    return convert(draft, effect, Metric.PARTIAL_CORRELATION)
