"""How readings become effects: every choice that can move the number, spelled out."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal, InvalidOperation
from typing import Any

from analysis.methods.effects_correlations import PARTIAL_CORRELATION_FORMS, PARTIAL_CORRELATION_VARIANCES
from analysis.methods.effects_means import MEAN_VARIANCES, SMALL_SAMPLE_CORRECTIONS
from analysis.methods.effects_proportions import ZeroCells
from analysis.methods.errors import InvalidInput, UnknownChoice
from evidence.readings import Metric

COVARIANCE_POLICIES = ("largest", "uncorrelated", "exclude")
DIRECTIONS = ("higher", "lower")
OUTCOME_MEANS = ("estimated", "fixed")
CLUSTER_CORRECTIONS = ("inflate", "none")
SAMPLE_MEANS = "sample-means"


@dataclass(frozen=True, kw_only=True)
class EffectPlan:
    """One way of turning readings into effects.

    Attributes
    ----------
    metric : the question's metric.
    good_direction : ``higher`` or ``lower``; turns the sign only together with ``align_sign``.
    align_sign : turn the sign once, so that positive is good.
    evaluation : ``{"at": "sample-means"}``, or ``{"at": {"exposure": "2.0", "moderator": "3.0"}}`` for a common
        point; the exposure there is in its own units even where a regression uses its logarithm.
    zero_cells : ``correction``, ``amount``, ``when``, ``double_zero``; see
        :class:`analysis.methods.effects_proportions.ZeroCells`.
    covariance_policy : when the standard error is known only within bounds, use the ``largest``, take unprinted
        covariances as zero (``uncorrelated``, marked approximate), or ``exclude`` the effect.
    cluster_correction : ``inflate`` the standard error where a paper ignored its clusters, or ``none``.
    outcome_mean : ``estimated``: carry the sampling error of the outcome's mean into effects relative to it,
        where a standard deviation and observations are printed; or ``fixed``.
    partial_correlation_variance, partial_correlation_form, small_sample_correction, mean_difference_variance,
    log_response_ratio_variance : see the functions of ``analysis.methods`` that take them.

    Raises
    ------
    UnknownChoice, InvalidInput
        When a field is none of the documented ones.
    """

    metric: str
    good_direction: str = "higher"
    align_sign: bool = False
    evaluation: Mapping[str, Any] = field(default_factory=lambda: {"at": SAMPLE_MEANS})
    zero_cells: Mapping[str, str] = field(default_factory=dict)
    covariance_policy: str = "largest"
    cluster_correction: str = "inflate"
    outcome_mean: str = "estimated"
    partial_correlation_variance: str = "t-preserving"
    partial_correlation_form: str = "standard"
    small_sample_correction: str = "exact"
    mean_difference_variance: str = "pooled"
    log_response_ratio_variance: str = "separate"
    point: Mapping[str, float] | None = field(init=False, repr=False, compare=False)
    """The common point as numbers; ``None`` at sample means."""
    cells: ZeroCells = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        choices = {
            "metric": tuple(Metric),
            "good_direction": DIRECTIONS,
            "covariance_policy": COVARIANCE_POLICIES,
            "cluster_correction": CLUSTER_CORRECTIONS,
            "outcome_mean": OUTCOME_MEANS,
            "partial_correlation_variance": PARTIAL_CORRELATION_VARIANCES,
            "partial_correlation_form": PARTIAL_CORRELATION_FORMS,
            "small_sample_correction": SMALL_SAMPLE_CORRECTIONS,
            "mean_difference_variance": MEAN_VARIANCES,
            "log_response_ratio_variance": MEAN_VARIANCES,
        }
        for name, allowed in choices.items():
            if getattr(self, name) not in allowed:
                raise UnknownChoice(name, getattr(self, name), allowed)
        object.__setattr__(self, "point", _point(self.evaluation))
        object.__setattr__(self, "cells", _zero_cells(self.zero_cells))

    def as_json(self) -> dict[str, Any]:
        """Every choice with its default written out: equal plans have equal JSON."""
        return {
            "metric": str(self.metric),
            "good_direction": str(self.good_direction),
            "align_sign": self.align_sign,
            "evaluation": {"at": SAMPLE_MEANS if self.point is None else dict(self.evaluation["at"])},
            "zero_cells": {
                "correction": self.cells.correction,
                "amount": str(self.zero_cells.get("amount", "0.5")),
                "when": self.cells.when,
                "double_zero": self.cells.double_zero,
            },
            "covariance_policy": self.covariance_policy,
            "cluster_correction": self.cluster_correction,
            "outcome_mean": self.outcome_mean,
            "partial_correlation_variance": self.partial_correlation_variance,
            "partial_correlation_form": self.partial_correlation_form,
            "small_sample_correction": self.small_sample_correction,
            "mean_difference_variance": self.mean_difference_variance,
            "log_response_ratio_variance": self.log_response_ratio_variance,
        }


def _number(name: str, value: Any) -> float:
    try:
        number = Decimal(str(value))
    except InvalidOperation as error:
        raise InvalidInput(name, f"{value!r} is not a number") from error
    if not number.is_finite() or abs(number) > Decimal("1e30"):
        raise InvalidInput(name, f"{value!r} is not a number of ordinary size")
    return float(number)


def _point(evaluation: Mapping[str, Any]) -> dict[str, float] | None:
    at = evaluation.get("at", SAMPLE_MEANS)
    if at == SAMPLE_MEANS:
        return None
    if not isinstance(at, Mapping):
        raise UnknownChoice("evaluation", at, (SAMPLE_MEANS, "a value for each variable"))
    return {str(name): _number("evaluation", value) for name, value in at.items()}


def _zero_cells(settings: Mapping[str, str]) -> ZeroCells:
    known = ("correction", "amount", "when", "double_zero")
    for name in settings:
        if name not in known:
            raise UnknownChoice("zero_cells", name, known)
    return ZeroCells(
        correction=settings.get("correction", "constant"),
        amount=_number("zero_cells", settings.get("amount", "0.5")),
        when=settings.get("when", "any-zero"),
        double_zero=settings.get("double_zero", "exclude"),
    )
