"""Effects of a regression: the derivative of the outcome at a point, its standard error, and its scale.

The steps, in order: the point of evaluation; the derivative of each term there (c) and the slope c'b; the
standard error of each term; the bounds that the printed covariances and the paper's own marginal effect leave for
that of c'b; the protocol's choice within them; the plan's metric.
"""

import math
from dataclasses import dataclass

from analysis.effects.conversions import convert
from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.effects.partial import TEST_METRICS, of_test_statistic
from analysis.effects.precision import choose, record
from analysis.methods.effects import NoEffect
from analysis.methods.effects_bounds import KnownCombination, StandardErrorBounds, standard_error_bounds
from analysis.methods.effects_regression import scaled_slope, term_derivative
from analysis.methods.effects_vocabulary import Flag, Reason, Rule
from evidence.readings import (
    Metric,
    RecoveredPrecision,
    Regression,
    Term,
    TermForm,
    VariableScale,
    degrees_of_freedom_of,
    exact_number,
    recover_precision,
    slope_at_printed_means,
)

_LARGEST_LOGARITHM = 300.0
#: Metrics of two groups that a slope in the exposure's own units gives as it stands, by the scale of the outcome.
_GROUP_METRICS: dict[str, VariableScale] = {
    Metric.MEAN_DIFFERENCE: VariableScale.LEVEL,
    Metric.RISK_DIFFERENCE: VariableScale.LEVEL,
    Metric.LOG_RESPONSE_RATIO: VariableScale.LOGARITHM,
}


def of_regression(reading: Regression, draft: Draft) -> Bounded:
    metric = draft.plan.metric
    if not _is_reachable(reading, metric):
        raise NotEstimable(Reason.METRIC_NOT_REACHABLE)
    if metric in TEST_METRICS:
        return of_test_statistic(_slope(reading, draft), _degrees_of_freedom(reading, draft), draft)
    if metric in (Metric.STANDARDISED_MEAN_DIFFERENCE, Metric.LOG_ODDS_RATIO):
        return _difference(reading, draft)
    return _on_scale(reading, _slope(reading, draft), draft)


def _is_reachable(reading: Regression, metric: str) -> bool:
    """Differences and ratios of groups are a regression's slope only on the outcome's matching scale."""
    if metric == Metric.LOG_RISK_RATIO:
        return False
    if metric in _GROUP_METRICS:
        return reading.exposure.scale is VariableScale.LEVEL and reading.outcome.scale is _GROUP_METRICS[metric]
    return True


# --- the point of evaluation -------------------------------------------------------------------------------------


def _entered_exposure(reading: Regression, draft: Draft) -> float:
    """The exposure at the point of evaluation, as it enters the regression."""
    point = draft.plan.point
    logarithm = reading.exposure.scale is VariableScale.LOGARITHM
    if point is not None and "exposure" in point:
        level = point["exposure"]
        if not logarithm:
            return level
        if level <= 0:
            raise NotEstimable(Reason.EXPOSURE_VALUE_NOT_POSITIVE)
        return math.log(level)
    if reading.exposure.mean is None:
        raise NotEstimable(Reason.EXPOSURE_VALUE_NOT_PRINTED)
    if point is not None:
        draft.flag(Flag.EXPOSURE_AT_SAMPLE)
    return reading.exposure.mean.number


def _exposure_level(reading: Regression, draft: Draft) -> float:
    """The exposure at the point of evaluation, in its own units."""
    entered = _entered_exposure(reading, draft)
    if reading.exposure.scale is VariableScale.LEVEL:
        return entered
    if draft.plan.point is None or "exposure" not in draft.plan.point:
        draft.flag(Flag.GEOMETRIC_MEAN)
    return _exponential(entered)


def _exponential(logarithm: float) -> float:
    if abs(logarithm) > _LARGEST_LOGARITHM:
        raise NotEstimable(Reason.OUTSIDE_NUMERIC_RANGE)
    return math.exp(logarithm)


def _moderator(term: Term, draft: Draft) -> float:
    point = draft.plan.point
    if point is not None and term.moderator is not None and term.moderator in point:
        return point[term.moderator]
    if term.at is None:
        raise NotEstimable(Reason.MODERATOR_VALUE_NOT_PRINTED)
    if point is not None:
        draft.flag(Flag.MODERATOR_AT_SAMPLE)
    return term.at.number


def _gradient(reading: Regression, draft: Draft) -> list[float]:
    """c: the derivative of each term at the point of evaluation."""
    gradient = []
    for term in reading.terms:
        if term.form is TermForm.LINEAR:
            gradient.append(1.0)
        elif term.form is TermForm.INTERACTION:
            gradient.append(term_derivative("interaction", moderator=_moderator(term, draft)))
        else:
            exposure = _entered_exposure(reading, draft)
            if term.form is TermForm.LOGARITHM and exposure <= 0:
                raise NotEstimable(Reason.EXPOSURE_VALUE_NOT_POSITIVE)
            gradient.append(term_derivative(term.form.value, exposure=exposure))
    return gradient


def _sample_gradient(reading: Regression) -> list[float] | None:
    """c at the printed sample values; ``None`` when one of them is not printed."""
    gradient = []
    for term in reading.terms:
        exposure = None if reading.exposure.mean is None else reading.exposure.mean.number
        moderator = None if term.at is None else term.at.number
        needed = moderator if term.form is TermForm.INTERACTION else exposure
        if needed is None and term.form is not TermForm.LINEAR:
            return None
        gradient.append(term_derivative(term.form.value, exposure=exposure, moderator=moderator))
    return gradient


# --- the slope and its standard error --------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Marginal:
    """The marginal effect printed in the paper: its point (when known), slope and precision."""

    gradient: list[float] | None
    slope: float | None
    precision: RecoveredPrecision


def _slope(reading: Regression, draft: Draft) -> Bounded:
    """c'b per unit of the exposure as it enters the regression, with the standard errors that the print allows."""
    draft.rules.append(Rule.MARGINAL_EFFECT)
    marginal = _printed_marginal(reading, draft)
    try:
        gradient = _gradient(reading, draft)
    except NotEstimable:
        if marginal is None or marginal.slope is None or marginal.gradient is not None or draft.plan.point is not None:
            raise
        return _marginal_itself(marginal, draft)
    coefficients = [term.coefficient.number for term in reading.terms]
    slope = math.fsum(c * b for c, b in zip(gradient, coefficients, strict=True))
    for term, c in zip(reading.terms, gradient, strict=True):
        draft.step(f"derivative-of-{term.name}", c)
    draft.step("slope", slope)
    active = [i for i, c in enumerate(gradient) if c != 0]
    if not active:
        raise NotEstimable(Reason.NO_SLOPE_AT_POINT)
    same_point = marginal is not None and (
        draft.plan.point is None if marginal.gradient is None else marginal.gradient == gradient
    )
    errors = _term_errors(reading, draft, active, optional=same_point)
    if errors is None:
        # Some term has no error of its own; the paper's marginal effect at this very point has.
        if marginal is None:
            raise NotEstimable(Reason.PRECISION_NOT_PRINTED)
        return _with_marginal_error(slope, marginal, draft)
    bounds = _bounds(reading, draft, gradient, errors, marginal, same_point)
    if same_point and marginal is not None and not marginal.precision.is_bound:
        if _marginal_is_possible(marginal.precision, bounds, gradient, errors):
            return _with_marginal_error(slope, marginal, draft)
        draft.flag(Flag.MARGINAL_EFFECT_SET_ASIDE)
    high = bounds.high
    if same_point and marginal is not None and marginal.precision.is_bound:
        high = min(high, max(marginal.precision.high or high, bounds.low))
    only_below = any(errors[i].is_bound for i in active)
    draft.step("bounds-by", bounds.method)
    if bounds.is_exact and not only_below:
        draft.step("standard-error-of-slope", bounds.high)
        return Bounded(slope, bounds.high, bounds.high, bounds.high)
    return choose(draft, slope, bounds.low, high, min(bounds.uncorrelated, high))


def _term_errors(
    reading: Regression, draft: Draft, active: list[int], *, optional: bool
) -> dict[int, RecoveredPrecision] | None:
    """The precision of every term that has one; leaves (or ``None`` when optional) when an active term has
    none."""
    found: dict[int, RecoveredPrecision] = {}
    for i, term in enumerate(reading.terms):
        recovered = recover_precision(
            term.coefficient, term.precision, degrees_of_freedom=reading.residual_degrees_of_freedom
        )
        if recovered.standard_error is not None:
            found[i] = recovered
            if i in active:
                record(draft, recovered, of=term.name)
        elif i in active:
            if optional:
                return None
            record(draft, recovered)
    return found


def _printed_marginal(reading: Regression, draft: Draft) -> _Marginal | None:
    """The paper's own marginal effect, unless it has no precision or is not what the coefficients give."""
    printed = reading.marginal_effect
    if printed is None:
        return None
    gradient = _sample_gradient(reading)
    computed = slope_at_printed_means(reading)
    estimate = printed.estimate
    if estimate is not None and computed is not None:
        slack = 1e-9 * max(abs(computed.low), abs(computed.high))
        if float(estimate.high) < computed.low - slack or float(estimate.low) > computed.high + slack:
            draft.flag(Flag.MARGINAL_EFFECT_SET_ASIDE)
            return None
    if estimate is None and computed is not None:
        estimate = exact_number(computed.point)
    recovered = recover_precision(estimate, printed.precision, degrees_of_freedom=reading.residual_degrees_of_freedom)
    if recovered.standard_error is None:
        return None
    slope = None if printed.estimate is None else printed.estimate.number
    return _Marginal(gradient, slope, recovered)


def _marginal_itself(marginal: _Marginal, draft: Draft) -> Bounded:
    """The printed marginal effect as the effect, when the means at which to evaluate are not printed."""
    draft.flag(Flag.MARGINAL_EFFECT_AS_PRINTED)
    slope = 0.0 if marginal.slope is None else marginal.slope
    draft.step("slope", slope)
    return _with_marginal_error(slope, marginal, draft)


def _with_marginal_error(slope: float, marginal: _Marginal, draft: Draft) -> Bounded:
    error = record(draft, marginal.precision, of="marginal-effect")
    draft.flag(Flag.STANDARD_ERROR_FROM_MARGINAL_EFFECT)
    if marginal.precision.is_bound:
        return choose(draft, slope, 0.0, error, error)
    return Bounded(slope, error, error, error)


def _marginal_is_possible(
    marginal: RecoveredPrecision,
    bounds: StandardErrorBounds,
    gradient: list[float],
    errors: dict[int, RecoveredPrecision],
) -> bool:
    """Whether the printed error of the marginal effect meets the bounds, both loosened by their rounding."""
    slack = 1e-9 * bounds.high
    for i, recovered in errors.items():
        if recovered.standard_error is not None and recovered.high is not None:
            slack += abs(gradient[i]) * (recovered.high - recovered.standard_error)
    low = marginal.low or 0.0
    high = math.inf if marginal.high is None else marginal.high
    return low <= bounds.high + slack and high >= bounds.low - slack


def _bounds(
    reading: Regression,
    draft: Draft,
    gradient: list[float],
    errors: dict[int, RecoveredPrecision],
    marginal: _Marginal | None,
    same_point: bool,
) -> StandardErrorBounds:
    """The attainable standard errors of the slope, from everything printed about the terms."""
    kept = sorted(errors)
    place = {reading.terms[i].name: k for k, i in enumerate(kept)}
    sizes = [errors[i].standard_error or 0.0 for i in kept]
    covariances: dict[tuple[int, int], float] = {}
    for covariance in reading.covariances or ():
        first, second = covariance.between
        if first in place and second in place:
            covariances[place[first], place[second]] = covariance.value.number
    known: KnownCombination | None = None
    # A term without an error of its own cannot take part in what is known about the others.
    if (
        marginal is not None
        and marginal.gradient is not None
        and not same_point
        and all(c == 0 or i in errors for i, c in enumerate(marginal.gradient))
    ):
        at_sample = tuple(marginal.gradient[i] for i in kept)
        largest = math.fsum(abs(c) * s for c, s in zip(at_sample, sizes, strict=True))
        precision = marginal.precision
        high = largest if precision.high is None else precision.high
        known = KnownCombination(at_sample, precision.low or 0.0, high)
    only_below = [errors[i].is_bound for i in kept]
    bounds = standard_error_bounds([gradient[i] for i in kept], sizes, covariances, known=known, upper_only=only_below)
    if bounds.shrinkage < 1:
        if not _within_rounding(reading, errors, place, kept, bounds.shrinkage):
            raise NotEstimable(Reason.COVARIANCES_IMPOSSIBLE)
        draft.flag(Flag.COVARIANCES_ROUNDED_TO_FIT)
        draft.step("covariances-shrunk-to", bounds.shrinkage)
    if bounds.known_combination_used is False:
        draft.flag(Flag.MARGINAL_EFFECT_SET_ASIDE)
    if not bounds.converged:
        draft.flag(Flag.BOUNDS_NOT_TIGHTENED)
    return bounds


def _within_rounding(
    reading: Regression,
    errors: dict[int, RecoveredPrecision],
    place: dict[str, int],
    kept: list[int],
    shrinkage: float,
) -> bool:
    """Whether covariances shrunk so much could still be printed as they are, given the rounding of the errors."""
    for covariance in reading.covariances or ():
        if not all(name in place for name in covariance.between):
            continue
        loose = 0.0
        for name in covariance.between:
            recovered = errors[kept[place[name]]]
            if recovered.high is None or not recovered.standard_error:
                return True
            loose += recovered.high / recovered.standard_error - 1
        allowed = float(covariance.value.high - covariance.value.low) / 2
        size = abs(covariance.value.number)
        if (1 - shrinkage) * size > allowed + loose * size + 1e-9 * size:
            return False
    return True


# --- the metric --------------------------------------------------------------------------------------------------


def _degrees_of_freedom(reading: Regression, draft: Draft) -> float:
    if reading.residual_degrees_of_freedom is not None:
        return float(reading.residual_degrees_of_freedom)
    for term in reading.terms:
        degrees = degrees_of_freedom_of(term.precision)
        if degrees is not None:
            return degrees
    if reading.observations is None:
        raise NotEstimable(Reason.DEGREES_OF_FREEDOM_NOT_PRINTED)
    draft.flag(Flag.DEGREES_OF_FREEDOM_APPROXIMATED)
    degrees = reading.observations - len(reading.terms) - 1
    if degrees < 1:
        raise NotEstimable(Reason.TOO_FEW_OBSERVATIONS)
    return float(degrees)


def _difference(reading: Regression, draft: Draft) -> Bounded:
    """A standardised difference, from the outcome's deviation where printed, else through the partial
    correlation."""
    slope = _slope(reading, draft)
    deviation = reading.outcome.standard_deviation
    if deviation is not None and deviation.value > 0 and reading.exposure.scale is VariableScale.LEVEL:
        draft.flag(Flag.EXPOSURE_AS_TREATMENT)
        draft.flag(Flag.TOTAL_DEVIATION)
        effect = _scaled(draft, slope, Rule.OUTCOME_DEVIATIONS, 1 / deviation.number)
        return convert(draft, effect, Metric.STANDARDISED_MEAN_DIFFERENCE)
    return of_test_statistic(slope, _degrees_of_freedom(reading, draft), draft)


def _scaled(
    draft: Draft,
    slope: Bounded,
    rule: Rule,
    factor: float,
    outcome_mean: float | None = None,
    outcome_mean_variance: float = 0.0,
) -> Bounded:
    """The slope on another scale, with each end of its standard error carried through the same formula."""

    def at(error: float) -> float:
        outcome = scaled_slope(
            slope.value,
            error * error,
            factor,
            outcome_mean=outcome_mean,
            outcome_mean_variance=outcome_mean_variance,
        )
        if isinstance(outcome, NoEffect):
            if error == 0 and outcome.reason is Reason.ZERO_VARIANCE:
                return 0.0
            raise NotEstimable(outcome.reason)
        return outcome.standard_error

    effect = draft.take(
        rule,
        scaled_slope(
            slope.value,
            slope.standard_error**2,
            factor,
            outcome_mean=outcome_mean,
            outcome_mean_variance=outcome_mean_variance,
        ),
    )
    chosen = effect.standard_error
    if slope.low == slope.high:
        return Bounded(effect.value, chosen, chosen, chosen)
    return Bounded(effect.value, chosen, at(slope.low), at(slope.high))


def _outcome_mean(reading: Regression, draft: Draft) -> tuple[float, float]:
    """The mean of an outcome in levels, above zero, and its sampling variance where that is printed and wanted."""
    outcome = reading.outcome
    if outcome.mean is None:
        raise NotEstimable(Reason.OUTCOME_MEAN_NOT_PRINTED)
    if outcome.mean.value <= 0:
        raise NotEstimable(Reason.OUTCOME_MEAN_NOT_POSITIVE)
    variance = 0.0
    if draft.plan.outcome_mean == "estimated":
        if outcome.standard_deviation is not None and reading.observations is not None:
            variance = outcome.standard_deviation.number**2 / reading.observations
            draft.step("variance-of-outcome-mean", variance)
        else:
            draft.flag(Flag.OUTCOME_MEAN_FIXED)
    draft.step("outcome-mean", outcome.mean.number)
    return outcome.mean.number, variance


def _per_level(reading: Regression, draft: Draft) -> float:
    """What turns a derivative by the entered exposure into one by the exposure in its own units."""
    if reading.exposure.scale is VariableScale.LEVEL:
        return 1.0
    return 1.0 / _exposure_level(reading, draft)


def _on_scale(reading: Regression, slope: Bounded, draft: Draft) -> Bounded:
    metric = draft.plan.metric
    if metric == Metric.ELASTICITY:
        return _elasticity(reading, slope, draft)
    if metric == Metric.SEMI_ELASTICITY:
        return _relative(reading, slope, Rule.SEMI_ELASTICITY, _per_level(reading, draft), draft)
    if metric == Metric.STANDARDISED_COEFFICIENT:
        return _standardised(reading, slope, draft)
    if metric == Metric.RAW_COEFFICIENT:
        return _raw(reading, slope, draft)
    draft.flag(Flag.EXPOSURE_AS_TREATMENT)
    return slope


def _relative(reading: Regression, slope: Bounded, rule: Rule, factor: float, draft: Draft) -> Bounded:
    if reading.outcome.scale is VariableScale.LOGARITHM:
        return slope if factor == 1 else _scaled(draft, slope, rule, factor)
    mean, variance = _outcome_mean(reading, draft)
    return _scaled(draft, slope, rule, factor, mean, variance)


def _elasticity(reading: Regression, slope: Bounded, draft: Draft) -> Bounded:
    factor = 1.0
    if reading.exposure.scale is VariableScale.LEVEL:
        factor = _exposure_level(reading, draft)
        if factor == 0:
            raise NotEstimable(Reason.EXPOSURE_VALUE_ZERO)
        draft.step("exposure", factor)
    return _relative(reading, slope, Rule.ELASTICITY, factor, draft)


def _standardised(reading: Regression, slope: Bounded, draft: Draft) -> Bounded:
    exposure, outcome = reading.exposure.standard_deviation, reading.outcome.standard_deviation
    if exposure is None or outcome is None:
        raise NotEstimable(Reason.DEVIATION_NOT_PRINTED)
    if exposure.value == 0 or outcome.value == 0:
        raise NotEstimable(Reason.ZERO_DEVIATION)
    return _scaled(draft, slope, Rule.STANDARDISED_COEFFICIENT, exposure.number / outcome.number)


def _raw(reading: Regression, slope: Bounded, draft: Draft) -> Bounded:
    factor = _per_level(reading, draft)
    if reading.outcome.scale is VariableScale.LOGARITHM:
        # dy/dx = y d(ln y)/dx, at the geometric mean of y: the exponential of the mean of its logarithm.
        if reading.outcome.mean is None:
            raise NotEstimable(Reason.OUTCOME_MEAN_NOT_PRINTED)
        draft.flag(Flag.GEOMETRIC_MEAN)
        factor *= _exponential(reading.outcome.mean.number)
    return slope if factor == 1 else _scaled(draft, slope, Rule.PER_UNIT, factor)
