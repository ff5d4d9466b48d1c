"""Along the line log odds ratio - standardised mean difference - correlation - Fisher's z.

Neighbours on the line have a published conversion; anything further apart goes through those between.
"""

from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.methods.effects_conversions import (
    correlation_to_difference,
    correlation_to_fisher_z,
    difference_to_correlation,
    difference_to_log_odds_ratio,
    fisher_z_to_correlation,
    log_odds_ratio_to_difference,
)
from analysis.methods.effects_vocabulary import Flag, Reason, Rule
from evidence.readings import Metric

_LINE = (
    Metric.LOG_ODDS_RATIO,
    Metric.STANDARDISED_MEAN_DIFFERENCE,
    Metric.CORRELATION,
    Metric.FISHER_Z,
)


def _place(metric: str) -> int | None:
    if metric == Metric.PARTIAL_CORRELATION:
        metric = Metric.CORRELATION
    return _LINE.index(metric) if metric in _LINE else None


def convert(draft: Draft, effect: Bounded, source: str, *, group_sizes: tuple[float, float] | None = None) -> Bounded:
    """The effect in the plan's metric, from another metric of the line.

    Group sizes matter between a difference and a correlation; equal ones are assumed, and flagged, when not known.
    """
    target = draft.plan.metric
    if source == target:
        return effect
    here, there = _place(source), _place(target)
    if here is None or there is None:
        raise NotEstimable(Reason.METRIC_NOT_REACHABLE)
    if target == Metric.PARTIAL_CORRELATION:
        draft.flag(Flag.ZERO_ORDER)
    if source == Metric.PARTIAL_CORRELATION:
        draft.flag(Flag.PARTIAL_AS_CORRELATION)
    # Between a correlation and its Fisher z nothing is assumed; every other step rests on a distribution.
    if min(here, there) < _LINE.index(Metric.CORRELATION):
        draft.flag(Flag.CONVERTED)
    while here != there:
        forward = there > here
        effect = _one_step(draft, effect, here, forward, group_sizes)
        here += 1 if forward else -1
    return effect


def _one_step(
    draft: Draft, effect: Bounded, here: int, forward: bool, group_sizes: tuple[float, float] | None
) -> Bounded:
    value, variance = effect.value, effect.standard_error**2
    if (here, forward) == (0, True):
        rule, outcome = Rule.ODDS_RATIO_TO_DIFFERENCE, log_odds_ratio_to_difference(value, variance)
    elif (here, forward) == (1, False):
        rule, outcome = Rule.DIFFERENCE_TO_ODDS_RATIO, difference_to_log_odds_ratio(value, variance)
    elif (here, forward) == (1, True):
        if group_sizes is None:
            draft.flag(Flag.EQUAL_GROUPS_ASSUMED)
        rule = Rule.DIFFERENCE_TO_CORRELATION
        outcome = difference_to_correlation(value, variance, group_sizes=group_sizes)
    elif (here, forward) == (2, False):
        rule, outcome = Rule.CORRELATION_TO_DIFFERENCE, correlation_to_difference(value, variance)
    elif (here, forward) == (2, True):
        rule, outcome = Rule.CORRELATION_TO_FISHER_Z, correlation_to_fisher_z(value, variance)
    else:
        rule, outcome = Rule.FISHER_Z_TO_CORRELATION, fisher_z_to_correlation(value, variance)
    return draft.convert(rule, effect, outcome)
