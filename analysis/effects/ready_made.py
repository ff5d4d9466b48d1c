"""Effects that the paper prints itself."""

import math

from analysis.effects.conversions import convert
from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.effects.groups import of_printed_correlation
from analysis.effects.partial import TEST_METRICS, of_test_statistic
from analysis.effects.precision import choose, record
from analysis.methods.effects_correlations import fisher_z, t_of_correlation
from analysis.methods.effects_vocabulary import Flag, Reason, Rule
from evidence.readings import (
    EffectScale,
    EstimateScale,
    Metric,
    ReadyMadeEffect,
    Unrecovered,
    degrees_of_freedom_of,
    recover_precision,
)

#: Coefficients with a t statistic, from which a partial correlation follows.
_COEFFICIENTS = (
    Metric.RAW_COEFFICIENT,
    Metric.ELASTICITY,
    Metric.SEMI_ELASTICITY,
    Metric.STANDARDISED_COEFFICIENT,
    Metric.MEAN_DIFFERENCE,
)


def of_ready_made_effect(reading: ReadyMadeEffect, draft: Draft) -> Bounded:
    metric = reading.metric
    scale = EstimateScale.IDENTITY
    value = reading.estimate.number
    if reading.scale is EffectScale.RATIO:
        scale, value = EstimateScale.LOGARITHM, math.log(value)
        draft.step("log-of-ratio", value)
    elif metric in (Metric.CORRELATION, Metric.PARTIAL_CORRELATION):
        scale = EstimateScale.CORRELATION
    recovered = recover_precision(reading.estimate, reading.precision, scale=scale)
    if recovered.reason is Unrecovered.NOT_PRINTED:
        return _by_observations(reading, value, draft)
    draft.rules.append(Rule.READY_MADE)
    error = record(draft, recovered)
    effect = Bounded(value, error, error, error)
    if recovered.is_bound:
        effect = choose(draft, value, 0.0, error, error)
    if metric in _COEFFICIENTS and draft.plan.metric in TEST_METRICS:
        return of_test_statistic(effect, _degrees_of_freedom(reading, draft), draft)
    return convert(draft, effect, metric)


def _degrees_of_freedom(reading: ReadyMadeEffect, draft: Draft) -> float:
    degrees = degrees_of_freedom_of(reading.precision)
    if degrees is not None:
        return degrees
    if reading.observations is None:
        raise NotEstimable(Reason.DEGREES_OF_FREEDOM_NOT_PRINTED)
    draft.flag(Flag.DEGREES_OF_FREEDOM_APPROXIMATED)
    if reading.observations <= 2:
        raise NotEstimable(Reason.TOO_FEW_OBSERVATIONS)
    return float(reading.observations - 2)


def _by_observations(reading: ReadyMadeEffect, value: float, draft: Draft) -> Bounded:
    """Correlations are the effects whose precision follows from the number of observations alone."""
    metric = reading.metric
    if metric is Metric.CORRELATION:
        return of_printed_correlation(value, reading.observations, draft)
    if metric is Metric.PARTIAL_CORRELATION:
        if abs(value) == 1:
            raise NotEstimable(Reason.PERFECT_CORRELATION)
        degrees = _degrees_of_freedom(reading, draft)
        return of_test_statistic(None, degrees, draft, t=t_of_correlation(value, degrees))
    if metric is Metric.FISHER_Z:
        if reading.observations is None:
            raise NotEstimable(Reason.OBSERVATIONS_NOT_PRINTED)
        # Only the variance 1/(n - 3) is wanted, and it does not depend on the correlation.
        at_zero = draft.settled(Rule.FISHER_Z, fisher_z(0.0, reading.observations))
        error = at_zero.standard_error
        return convert(draft, Bounded(value, error, error, error), metric)
    raise NotEstimable(Reason.PRECISION_NOT_PRINTED)
