"""A recovered standard error, written into the draft."""

from analysis.effects.draft import Bounded, Draft, NotEstimable
from analysis.methods.effects_vocabulary import Flag, Reason
from evidence.readings import RecoveredPrecision, Unrecovered

_REASONS = {
    Unrecovered.NOT_PRINTED: Reason.PRECISION_NOT_PRINTED,
    Unrecovered.ESTIMATE_ROUNDS_TO_ZERO: Reason.ESTIMATE_ROUNDS_TO_ZERO,
    Unrecovered.TEST_STATISTIC_ZERO: Reason.TEST_STATISTIC_ZERO,
}


def record(draft: Draft, recovered: RecoveredPrecision, *, of: str = "estimate") -> float:
    """Note where a standard error came from, and give it; leave when there is none."""
    if recovered.standard_error is None or recovered.source is None:
        raise NotEstimable(_REASONS[recovered.reason or Unrecovered.NOT_PRINTED])
    draft.step(f"source-of-standard-error-of-{of}", recovered.source.value)
    draft.step(f"standard-error-of-{of}", recovered.standard_error)
    if recovered.quantile is not None:
        draft.step(f"quantile-of-{of}", recovered.quantile)
    if recovered.degrees_of_freedom is not None:
        draft.step(f"degrees-of-freedom-of-{of}", recovered.degrees_of_freedom)
    if recovered.coarse_standard_error_set_aside:
        draft.flag(Flag.COARSE_STANDARD_ERROR)
    if recovered.is_bound:
        draft.flag(Flag.FROM_THRESHOLD)
    return recovered.standard_error


def choose(draft: Draft, value: float, low: float, high: float, uncorrelated: float) -> Bounded:
    """The standard error that the protocol picks within bounds that do not meet."""
    draft.step("smallest-standard-error", low)
    draft.step("largest-standard-error", high)
    policy = draft.plan.covariance_policy
    if policy == "exclude":
        raise NotEstimable(Reason.ONLY_A_BOUND)
    draft.flag(Flag.STANDARD_ERROR_BOUNDED)
    if policy == "uncorrelated":
        draft.flag(Flag.APPROXIMATE_STANDARD_ERROR)
        draft.step("uncorrelated-standard-error", uncorrelated)
        return Bounded(value, uncorrelated, low, high)
    return Bounded(value, high, low, high)
