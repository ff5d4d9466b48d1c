"""Effects of two groups and of correlations: counts, means, r."""

from analysis.effects.conversions import convert
from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.methods.effects_correlations import (
    correlation_effect,
    fisher_z,
    partial_correlation,
    t_of_correlation,
)
from analysis.methods.effects_means import (
    GroupSummary,
    log_response_ratio,
    mean_difference,
    pooled_standard_deviation,
    standardised_mean_difference,
    two_sample_t,
)
from analysis.methods.effects_proportions import log_odds_ratio, log_risk_ratio, risk_difference
from analysis.methods.effects_vocabulary import Flag, Reason, Rule
from evidence.readings import Correlation, MeanArm, Metric, TwoMeans, TwoProportions


def of_two_proportions(reading: TwoProportions, draft: Draft) -> Bounded:
    events = (float(reading.treated.events), float(reading.control.events))
    totals = (float(reading.treated.total), float(reading.control.total))
    cells = draft.plan.cells
    metric = draft.plan.metric
    if metric == Metric.LOG_RISK_RATIO:
        effect = draft.settled(Rule.LOG_RISK_RATIO, log_risk_ratio(events, totals, cells))
    elif metric == Metric.RISK_DIFFERENCE:
        effect = draft.settled(Rule.RISK_DIFFERENCE, risk_difference(events, totals, cells))
    else:
        effect = draft.settled(Rule.LOG_ODDS_RATIO, log_odds_ratio(events, totals, cells))
        effect = convert(draft, effect, Metric.LOG_ODDS_RATIO, group_sizes=totals)
    if any(step["name"] == "added-to-treated-cells" for step in draft.steps):
        draft.flag(Flag.CELLS_CORRECTED)
    return effect


def _summary(arm: MeanArm) -> GroupSummary:
    return GroupSummary(arm.mean.number, arm.standard_deviation.number, float(arm.observations))


def of_two_means(reading: TwoMeans, draft: Draft) -> Bounded:
    treated, control = _summary(reading.treated), _summary(reading.control)
    plan = draft.plan
    if plan.metric in (Metric.MEAN_DIFFERENCE, Metric.RAW_COEFFICIENT):
        if plan.metric == Metric.RAW_COEFFICIENT:
            draft.flag(Flag.EXPOSURE_AS_TREATMENT)
        return draft.settled(
            Rule.MEAN_DIFFERENCE, mean_difference(treated, control, variance=plan.mean_difference_variance)
        )
    if plan.metric == Metric.LOG_RESPONSE_RATIO:
        return draft.settled(
            Rule.LOG_RESPONSE_RATIO,
            log_response_ratio(treated, control, variance=plan.log_response_ratio_variance),
        )
    if plan.metric == Metric.PARTIAL_CORRELATION:
        return _partial_of_means(treated, control, draft)
    effect = draft.settled(
        Rule.STANDARDISED_MEAN_DIFFERENCE,
        standardised_mean_difference(treated, control, correction=plan.small_sample_correction),
    )
    sizes = (treated.observations, control.observations)
    return convert(draft, effect, Metric.STANDARDISED_MEAN_DIFFERENCE, group_sizes=sizes)


def _partial_of_means(treated: GroupSummary, control: GroupSummary, draft: Draft) -> Bounded:
    if min(treated.observations, control.observations) < 2:
        raise NotEstimable(Reason.TOO_FEW_OBSERVATIONS)
    if pooled_standard_deviation(treated, control) == 0:
        raise NotEstimable(Reason.ZERO_DEVIATION)
    draft.flag(Flag.ZERO_ORDER)
    degrees = treated.observations + control.observations - 2
    return _partial(two_sample_t(treated, control), degrees, draft)


def _partial(t: float, degrees: float, draft: Draft) -> Bounded:
    plan = draft.plan
    return draft.settled(
        Rule.PARTIAL_CORRELATION,
        partial_correlation(t, degrees, variance=plan.partial_correlation_variance, form=plan.partial_correlation_form),
    )


def of_correlation(reading: Correlation, draft: Draft) -> Bounded:
    return of_printed_correlation(reading.correlation.number, reading.observations, draft)


def of_printed_correlation(r: float, observations: int | None, draft: Draft) -> Bounded:
    """A plain correlation whose precision follows from the number of observations."""
    if observations is None:
        raise NotEstimable(Reason.OBSERVATIONS_NOT_PRINTED)
    metric = draft.plan.metric
    if metric == Metric.FISHER_Z:
        return draft.settled(Rule.FISHER_Z, fisher_z(r, observations))
    if metric == Metric.PARTIAL_CORRELATION:
        if abs(r) == 1:
            raise NotEstimable(Reason.PERFECT_CORRELATION)
        if observations < 3:
            raise NotEstimable(Reason.TOO_FEW_OBSERVATIONS)
        draft.flag(Flag.ZERO_ORDER)
        return _partial(t_of_correlation(r, observations - 2), observations - 2, draft)
    effect = draft.settled(Rule.CORRELATION, correlation_effect(r, observations))
    return convert(draft, effect, Metric.CORRELATION)
