"""The five kinds of reading, as immutable records of what is printed.

Nothing here is computed: a field that the paper does not print is ``None``. ``as_json`` gives back the content that
``read`` took in, digits and all. Start at :data:`Reading`.
"""

from dataclasses import dataclass
from typing import Any

from evidence.readings.printed import Printed
from evidence.readings.vocabulary import EffectScale, Kind, Metric, TermForm, VariableScale


def _put(target: dict[str, Any], **fields: Any) -> dict[str, Any]:
    """Add the fields that are known, printed numbers as their text."""
    for key, value in fields.items():
        if value is not None:
            target[key] = value.text if isinstance(value, Printed) else value
    return target


@dataclass(frozen=True, slots=True)
class Interval:
    """A printed interval and its level (a share: 0.95)."""

    level: Printed
    low: Printed
    high: Printed

    def as_json(self) -> dict[str, Any]:
        return {"level": self.level.text, "low": self.low.text, "high": self.high.text}


@dataclass(frozen=True, slots=True)
class Precision:
    """Every sign of precision printed beside one number; all of them optional."""

    standard_error: Printed | None = None
    t: Printed | None = None
    z: Printed | None = None
    interval: Interval | None = None
    p: Printed | None = None
    p_below: Printed | None = None
    f: Printed | None = None
    degrees_of_freedom: int | Printed | None = None

    def as_json(self) -> dict[str, Any]:
        return _put(
            {},
            standard_error=self.standard_error,
            t=self.t,
            z=self.z,
            interval=None if self.interval is None else self.interval.as_json(),
            p=self.p,
            p_below=self.p_below,
            f=self.f,
            degrees_of_freedom=self.degrees_of_freedom,
        )


@dataclass(frozen=True, slots=True)
class Cluster:
    """Assignment or sampling by clusters, and whether the paper's own errors account for it."""

    accounted_for: bool
    average_size: Printed | None = None
    intraclass_correlation: Printed | None = None

    def as_json(self) -> dict[str, Any]:
        return _put(
            {},
            average_size=self.average_size,
            intraclass_correlation=self.intraclass_correlation,
            accounted_for=self.accounted_for,
        )


def _cluster_json(cluster: Cluster | None) -> dict[str, Any] | None:
    return None if cluster is None else cluster.as_json()


@dataclass(frozen=True, slots=True)
class ReadyMadeEffect:
    """An effect that the paper prints itself, on the metric's scale or as a ratio."""

    metric: Metric
    scale: EffectScale
    estimate: Printed
    precision: Precision = Precision()
    observations: int | None = None
    cluster: Cluster | None = None

    @property
    def kind(self) -> Kind:
        return Kind.READY_MADE_EFFECT

    def as_json(self) -> dict[str, Any]:
        content = {
            "kind": self.kind.value,
            "metric": self.metric.value,
            "scale": self.scale.value,
            "estimate": self.estimate.text,
        }
        content |= self.precision.as_json()
        return _put(content, observations=self.observations, cluster=_cluster_json(self.cluster))


@dataclass(frozen=True, slots=True)
class ProportionArm:
    """Events among a total in one group."""

    events: int
    total: int

    def as_json(self) -> dict[str, Any]:
        return {"events": self.events, "total": self.total}


@dataclass(frozen=True, slots=True)
class TwoProportions:
    """Events and totals of a treated and a control group."""

    treated: ProportionArm
    control: ProportionArm
    cluster: Cluster | None = None

    @property
    def kind(self) -> Kind:
        return Kind.TWO_PROPORTIONS

    def as_json(self) -> dict[str, Any]:
        content = {
            "kind": self.kind.value,
            "treated": self.treated.as_json(),
            "control": self.control.as_json(),
        }
        return _put(content, cluster=_cluster_json(self.cluster))


@dataclass(frozen=True, slots=True)
class MeanArm:
    """Mean, standard deviation and number of observations of one group."""

    mean: Printed
    standard_deviation: Printed
    observations: int

    def as_json(self) -> dict[str, Any]:
        return {
            "mean": self.mean.text,
            "standard_deviation": self.standard_deviation.text,
            "observations": self.observations,
        }


@dataclass(frozen=True, slots=True)
class TwoMeans:
    """Means of a treated and a control group."""

    treated: MeanArm
    control: MeanArm
    cluster: Cluster | None = None

    @property
    def kind(self) -> Kind:
        return Kind.TWO_MEANS

    def as_json(self) -> dict[str, Any]:
        content = {
            "kind": self.kind.value,
            "treated": self.treated.as_json(),
            "control": self.control.as_json(),
        }
        return _put(content, cluster=_cluster_json(self.cluster))


@dataclass(frozen=True, slots=True)
class Correlation:
    """A correlation between outcome and exposure."""

    correlation: Printed
    observations: int | None = None
    cluster: Cluster | None = None

    @property
    def kind(self) -> Kind:
        return Kind.CORRELATION

    def as_json(self) -> dict[str, Any]:
        content = {"kind": self.kind.value, "correlation": self.correlation.text}
        return _put(content, observations=self.observations, cluster=_cluster_json(self.cluster))


@dataclass(frozen=True, slots=True)
class Variable:
    """The outcome or the exposure of a regression.

    ``mean`` and ``standard_deviation`` describe the variable as it enters the regression: of the logarithm when
    ``scale`` is logarithm.
    """

    scale: VariableScale
    unit: str | None = None
    mean: Printed | None = None
    standard_deviation: Printed | None = None

    def as_json(self) -> dict[str, Any]:
        return _put(
            {"scale": self.scale.value},
            unit=self.unit,
            mean=self.mean,
            standard_deviation=self.standard_deviation,
        )


@dataclass(frozen=True, slots=True)
class Term:
    """One regression term in which the exposure appears.

    ``moderator`` and ``at`` (its mean, or the value at which the paper evaluates it) belong to interactions only.
    """

    form: TermForm
    coefficient: Printed
    precision: Precision = Precision()
    moderator: str | None = None
    at: Printed | None = None

    @property
    def name(self) -> str:
        """How covariances refer to the term: its form, with the moderator for an interaction."""
        return f"{self.form.value}:{self.moderator}" if self.moderator is not None else self.form.value

    def as_json(self) -> dict[str, Any]:
        content = _put({"form": self.form.value}, **{"with": self.moderator}, at=self.at, coefficient=self.coefficient)
        return content | self.precision.as_json()


@dataclass(frozen=True, slots=True)
class Covariance:
    """A printed covariance of two coefficients, named as :attr:`Term.name` names them."""

    between: tuple[str, str]
    value: Printed

    def as_json(self) -> dict[str, Any]:
        return {"between": list(self.between), "value": self.value.text}


@dataclass(frozen=True, slots=True)
class MarginalEffect:
    """The marginal effect that the paper itself prints, at its sample means, on the scale of the regression."""

    estimate: Printed | None = None
    precision: Precision = Precision()

    def as_json(self) -> dict[str, Any]:
        return _put({}, estimate=self.estimate) | self.precision.as_json()


@dataclass(frozen=True, slots=True)
class Regression:
    """The terms of a regression in which the exposure appears, and what is printed about them.

    ``covariances`` is ``None`` when the coder did not say, empty when none are printed.
    """

    outcome: Variable
    exposure: Variable
    terms: tuple[Term, ...]
    covariances: tuple[Covariance, ...] | None = None
    marginal_effect: MarginalEffect | None = None
    observations: int | None = None
    residual_degrees_of_freedom: int | None = None
    clusters: int | None = None
    cluster: Cluster | None = None

    @property
    def kind(self) -> Kind:
        return Kind.REGRESSION

    def as_json(self) -> dict[str, Any]:
        content: dict[str, Any] = {
            "kind": self.kind.value,
            "outcome": self.outcome.as_json(),
            "exposure": self.exposure.as_json(),
            "terms": [term.as_json() for term in self.terms],
        }
        return _put(
            content,
            covariances=None if self.covariances is None else [each.as_json() for each in self.covariances],
            marginal_effect=None if self.marginal_effect is None else self.marginal_effect.as_json(),
            observations=self.observations,
            residual_degrees_of_freedom=self.residual_degrees_of_freedom,
            clusters=self.clusters,
            cluster=_cluster_json(self.cluster),
        )


Reading = ReadyMadeEffect | TwoProportions | TwoMeans | Correlation | Regression
