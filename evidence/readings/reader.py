"""From JSON to a reading: every field checked, everything wrong reported at once.

``read`` is the one way in. It refuses only what cannot have been printed (an interval that excludes its own
estimate, more events than people); printed numbers that merely disagree with each other pass, and
``check_consistency`` speaks about them. Error pointers are RFC 6901, relative to the reading.
"""

import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from decimal import Decimal
from enum import StrEnum
from typing import Any, TypeVar

from evidence.readings.errors import ReadingError, ReadingErrors, escape
from evidence.readings.kinds import (
    Cluster,
    Correlation,
    Covariance,
    Interval,
    MarginalEffect,
    MeanArm,
    Precision,
    ProportionArm,
    Reading,
    ReadyMadeEffect,
    Regression,
    Term,
    TwoMeans,
    TwoProportions,
    Variable,
)
from evidence.readings.printed import NotPrinted, Printed, printed
from evidence.readings.vocabulary import EffectScale, ErrorCode, Kind, Metric, TermForm, VariableScale

LONGEST_NAME = 200
LARGEST_COUNT = 10**12
MOST_TERMS = 12
#: Below this an interval has practically no width, whatever the standard error.
SMALLEST_LEVEL = Decimal("0.01")

#: Metrics that are logarithms of ratios, so that a paper may print the ratio instead.
RATIO_METRICS = frozenset({Metric.LOG_RISK_RATIO, Metric.LOG_ODDS_RATIO, Metric.LOG_RESPONSE_RATIO})
#: Metrics that cannot leave [-1, 1].
UNIT_METRICS = frozenset({Metric.CORRELATION, Metric.PARTIAL_CORRELATION, Metric.RISK_DIFFERENCE})

_PRECISION_KEYS = ("standard_error", "t", "z", "interval", "p", "p_below", "f", "degrees_of_freedom")

Choice = TypeVar("Choice", bound=StrEnum)


@dataclass(slots=True)
class _Object:
    """One JSON object under examination: hands out checked fields and collects what is wrong with them."""

    content: Mapping[str, Any]
    pointer: str
    what: str
    errors: list[ReadingError] = field(default_factory=list)

    def wrong(self, key: str | None, code: ErrorCode, detail: str) -> None:
        where = self.pointer if key is None else f"{self.pointer}/{escape(key)}"
        self.errors.append(ReadingError(where, code, detail))

    def allow(self, keys: Iterable[str]) -> None:
        """Every key outside ``keys`` is an error, with a likely spelling where there is one."""
        allowed = tuple(keys)
        for key in self.content:
            if key in allowed:
                continue
            near = difflib.get_close_matches(str(key)[:LONGEST_NAME], allowed, n=1)
            hint = f"Did you mean '{near[0]}'?" if near else f"It may hold {', '.join(allowed)}."
            self.wrong(str(key), ErrorCode.UNKNOWN_KEY, f"{str(key)[:60]!r} does not belong to {self.what}. {hint}")

    def get(self, key: str, *, required: bool) -> Any:
        value = self.content.get(key)
        if value is None and required:
            self.wrong(key, ErrorCode.MISSING, f"{self.what[0].upper()}{self.what[1:]} needs '{key}'.")
        return value

    def number(self, key: str, *, required: bool = False) -> Printed | None:
        value = self.get(key, required=required)
        if value is None:
            return None
        if not isinstance(value, str):
            self.wrong(
                key,
                ErrorCode.NUMBER_NOT_TEXT,
                f"Give '{key}' as text, exactly as printed (\"0.050\", not 0.05), so that its digits are kept.",
            )
            return None
        try:
            return printed(value)
        except NotPrinted as refusal:
            self.wrong(key, refusal.code, f"'{key}': {refusal.detail}")
            return None

    def count(self, key: str, *, smallest: int, required: bool = False) -> int | None:
        value = self.get(key, required=required)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int):
            self.wrong(key, ErrorCode.NOT_A_WHOLE_NUMBER, f"'{key}' is a count: a whole number without quotes.")
            return None
        if value < smallest:
            self.wrong(key, ErrorCode.COUNT_TOO_SMALL, f"'{key}' is {value}; it cannot be below {smallest}.")
            return None
        if value > LARGEST_COUNT:
            self.wrong(key, ErrorCode.COUNT_TOO_LARGE, f"'{key}' is above {LARGEST_COUNT}, more than any study.")
            return None
        return value

    def name(self, key: str, *, required: bool = False) -> str | None:
        value = self.get(key, required=required)
        if value is None:
            return None
        if not isinstance(value, str):
            self.wrong(key, ErrorCode.NOT_TEXT, f"'{key}' is text.")
            return None
        value = value.strip()
        if not value:
            self.wrong(key, ErrorCode.TEXT_EMPTY, f"'{key}' is empty. Name it, or leave the field out.")
        elif len(value) > LONGEST_NAME:
            self.wrong(key, ErrorCode.TEXT_TOO_LONG, f"'{key}' is longer than {LONGEST_NAME} characters.")
        elif not value.isprintable():
            self.wrong(key, ErrorCode.TEXT_UNPRINTABLE, f"'{key}' holds line breaks or control characters.")
        else:
            return value
        return None

    def choice(self, key: str, choices: type[Choice], *, default: Choice | None = None) -> Choice | None:
        value = self.get(key, required=default is None)
        if value is None:
            return default
        try:
            return choices(value)
        except ValueError:
            words = [str(each.value) for each in choices]
            near = difflib.get_close_matches(str(value)[:LONGEST_NAME], words, n=1)
            hint = f"Did you mean '{near[0]}'?" if near else f"It is one of {', '.join(words)}."
            self.wrong(key, ErrorCode.UNKNOWN_CHOICE, f"{str(value)[:60]!r} is not a known '{key}'. {hint}")
            return None

    def truth(self, key: str) -> bool | None:
        value = self.get(key, required=True)
        if value is not None and not isinstance(value, bool):
            self.wrong(key, ErrorCode.NOT_TRUE_OR_FALSE, f"'{key}' is true or false, without quotes.")
            return None
        return value

    def below(self, key: str, what: str, *, required: bool = False) -> "_Object | None":
        """The object under ``key``, sharing this one's list of errors."""
        value = self.get(key, required=required)
        return None if value is None else self._object(value, f"{self.pointer}/{key}", key, what)

    def list_below(self, key: str, what: str, *, required: bool = False) -> "list[_Object] | None":
        value = self.get(key, required=required)
        if value is None:
            return None
        if not isinstance(value, list | tuple):
            self.wrong(key, ErrorCode.NOT_A_LIST, f"'{key}' is a list.")
            return None
        found = [self._object(each, f"{self.pointer}/{key}/{i}", f"{key}/{i}", what) for i, each in enumerate(value)]
        return [each for each in found if each is not None]

    def _object(self, value: Any, pointer: str, key: str, what: str) -> "_Object | None":
        if not isinstance(value, Mapping):
            self.errors.append(
                ReadingError(pointer, ErrorCode.NOT_AN_OBJECT, f"'{key}' is an object with named fields.")
            )
            return None
        return _Object(value, pointer, what, self.errors)


def read(data: Mapping[str, Any], *, pointer: str = "") -> Reading:
    """Read one result as printed.

    Parameters
    ----------
    data : the reading's JSON: numbers as text exactly as printed, counts as whole numbers. ``null`` means not
        printed, like leaving the field out.
    pointer : RFC 6901 pointer of the reading in the document it came in, put before every error's own.

    Returns
    -------
    One of the five kinds of :data:`Reading`.

    Raises
    ------
    ReadingErrors
        Listing everything that cannot have been printed; nothing is repaired silently.
    """
    if not isinstance(data, Mapping):
        raise ReadingErrors(
            [ReadingError(pointer, ErrorCode.NOT_AN_OBJECT, "A reading is an object with named fields.")]
        )
    top = _Object(data, pointer, "a reading")
    kind = data.get("kind")
    reader = _READERS.get(kind) if isinstance(kind, str) else None
    if reader is None:
        kinds = ", ".join(_READERS)
        code = ErrorCode.MISSING if kind is None else ErrorCode.UNKNOWN_KIND
        top.wrong("kind", code, f"State the kind of reading as one of {kinds}.")
        raise ReadingErrors(top.errors)
    top.what = f"a {kind} reading"
    reading = reader(top)
    if top.errors or reading is None:
        raise ReadingErrors(top.errors)
    return reading


# --- the five kinds -------------------------------------------------------------------------------------------


def _ready_made_effect(top: _Object) -> ReadyMadeEffect | None:
    top.allow(("kind", "metric", "scale", "estimate", *_PRECISION_KEYS, "observations", "cluster"))
    metric = top.choice("metric", Metric)
    scale = top.choice("scale", EffectScale, default=EffectScale.AS_IS)
    estimate = top.number("estimate", required=True)
    precision = _precision(top, estimate)
    observations = top.count("observations", smallest=1)
    cluster = _cluster(top)
    if scale is EffectScale.RATIO:
        _check_ratio(top, metric, estimate, precision)
    elif metric in UNIT_METRICS and estimate is not None and abs(estimate.value) > 1:
        is_difference = metric is Metric.RISK_DIFFERENCE
        code = ErrorCode.EFFECT_OUTSIDE_RANGE if is_difference else ErrorCode.CORRELATION_OUTSIDE_RANGE
        top.wrong(
            "estimate",
            code,
            f"{estimate} is outside -1 to 1, where a {str(metric).replace('-', ' ')} lies. Check the decimal point.",
        )
    if top.errors or metric is None or scale is None or estimate is None:
        return None
    return ReadyMadeEffect(metric, scale, estimate, precision, observations, cluster)


def _check_ratio(top: _Object, metric: Metric | None, estimate: Printed | None, precision: Precision) -> None:
    if metric is not None and metric not in RATIO_METRICS:
        names = ", ".join(sorted(RATIO_METRICS))
        top.wrong(
            "scale",
            ErrorCode.RATIO_METRIC,
            f"A {metric} is not the logarithm of a ratio, so it cannot be printed as one. Use scale 'as-is', or "
            f"one of the metrics {names}.",
        )
    numbers = {"estimate": estimate}
    if precision.interval is not None:
        numbers |= {"interval/low": precision.interval.low, "interval/high": precision.interval.high}
    for key, number in numbers.items():
        if number is not None and number.value <= 0:
            top.errors.append(
                ReadingError(
                    f"{top.pointer}/{key}",
                    ErrorCode.RATIO_NOT_POSITIVE,
                    f"{number} cannot be a ratio or a limit of one: ratios are above zero. If the logarithm is "
                    "printed, use scale 'as-is'.",
                )
            )
    if precision.standard_error is not None:
        top.wrong(
            "standard_error",
            ErrorCode.RATIO_STANDARD_ERROR,
            "A standard error beside a ratio may be of the ratio or of its logarithm. Give the interval, z or p "
            "instead; or, if it is of the logarithm, the log effect with scale 'as-is'.",
        )


def _two_proportions(top: _Object) -> TwoProportions | None:
    top.allow(("kind", "treated", "control", "cluster"))
    treated, control = _proportion_arm(top, "treated"), _proportion_arm(top, "control")
    cluster = _cluster(top)
    if top.errors or treated is None or control is None:
        return None
    return TwoProportions(treated, control, cluster)


def _proportion_arm(top: _Object, key: str) -> ProportionArm | None:
    arm = top.below(key, f"the {key} group", required=True)
    if arm is None:
        return None
    arm.allow(("events", "total"))
    events = arm.count("events", smallest=0, required=True)
    total = arm.count("total", smallest=1, required=True)
    if events is None or total is None:
        return None
    if events > total:
        arm.wrong(
            "events",
            ErrorCode.EVENTS_EXCEED_TOTAL,
            f"{events} events among {total} is a proportion above one. Check for swapped numbers, or for events "
            "counted more than once a person.",
        )
        return None
    return ProportionArm(events, total)


def _two_means(top: _Object) -> TwoMeans | None:
    top.allow(("kind", "treated", "control", "cluster"))
    treated, control = _mean_arm(top, "treated"), _mean_arm(top, "control")
    cluster = _cluster(top)
    if top.errors or treated is None or control is None:
        return None
    return TwoMeans(treated, control, cluster)


def _mean_arm(top: _Object, key: str) -> MeanArm | None:
    arm = top.below(key, f"the {key} group", required=True)
    if arm is None:
        return None
    arm.allow(("mean", "standard_deviation", "observations"))
    mean = arm.number("mean", required=True)
    deviation = _standard_deviation(arm, required=True)
    observations = arm.count("observations", smallest=1, required=True)
    if mean is None or deviation is None or observations is None:
        return None
    return MeanArm(mean, deviation, observations)


def _standard_deviation(holder: _Object, *, required: bool = False) -> Printed | None:
    deviation = holder.number("standard_deviation", required=required)
    if deviation is not None and deviation.value < 0:
        holder.wrong(
            "standard_deviation",
            ErrorCode.STANDARD_DEVIATION_NEGATIVE,
            f"A standard deviation is never below zero, and {deviation} is. Check the column.",
        )
        return None
    return deviation


def _correlation(top: _Object) -> Correlation | None:
    top.allow(("kind", "correlation", "observations", "cluster"))
    correlation = top.number("correlation", required=True)
    if correlation is not None and abs(correlation.value) > 1:
        top.wrong(
            "correlation",
            ErrorCode.CORRELATION_OUTSIDE_RANGE,
            f"{correlation} is outside -1 to 1, where a correlation lies. Check the decimal point.",
        )
    observations = top.count("observations", smallest=1)
    cluster = _cluster(top)
    if top.errors or correlation is None:
        return None
    return Correlation(correlation, observations, cluster)


def _regression(top: _Object) -> Regression | None:
    top.allow(
        (
            "kind",
            "outcome",
            "exposure",
            "terms",
            "covariances",
            "marginal_effect",
            "observations",
            "residual_degrees_of_freedom",
            "clusters",
            "cluster",
        )
    )
    outcome, exposure = _variable(top, "outcome"), _variable(top, "exposure")
    before = len(top.errors)
    terms = _terms(top, exposure)
    # A covariance of a term that was itself refused is no second mistake.
    covariances = _covariances(top, terms, names_are_known=len(top.errors) == before)
    marginal_effect = _marginal_effect(top)
    observations = top.count("observations", smallest=1)
    degrees = top.count("residual_degrees_of_freedom", smallest=1)
    clusters = top.count("clusters", smallest=1)
    cluster = _cluster(top)
    if top.errors or outcome is None or exposure is None:
        return None
    return Regression(outcome, exposure, terms, covariances, marginal_effect, observations, degrees, clusters, cluster)


def _variable(top: _Object, key: str) -> Variable | None:
    holder = top.below(key, f"the {key}", required=True)
    if holder is None:
        return None
    holder.allow(("scale", "unit", "mean", "standard_deviation"))
    scale = holder.choice("scale", VariableScale)
    unit = holder.name("unit")
    mean = holder.number("mean")
    deviation = _standard_deviation(holder)
    return None if scale is None else Variable(scale, unit, mean, deviation)


def _terms(top: _Object, exposure: Variable | None) -> tuple[Term, ...]:
    holders = top.list_below("terms", "a term", required=True)
    if holders is None:
        return ()
    if len(holders) > MOST_TERMS:
        top.wrong(
            "terms",
            ErrorCode.TOO_MANY_TERMS,
            f"A reading holds up to {MOST_TERMS} terms: those with the exposure in them, not the controls.",
        )
        return ()
    if not top.content["terms"]:
        top.wrong("terms", ErrorCode.NO_TERMS, "Give at least one term in which the exposure appears.")
    found: dict[str, Term] = {}
    for holder in holders:
        term = _term(holder, exposure)
        if term is None:
            continue
        if term.name in found:
            holder.wrong(
                "with" if term.moderator is not None else "form",
                ErrorCode.TERM_REPEATED,
                f"The term '{term.name}' is given twice. Keep one, or name the other moderator.",
            )
        found[term.name] = term
    return tuple(found.values())


def _term(holder: _Object, exposure: Variable | None) -> Term | None:
    holder.allow(("form", "with", "at", "coefficient", *_PRECISION_KEYS))
    form = holder.choice("form", TermForm)
    moderator = holder.name("with", required=form is TermForm.INTERACTION)
    at = holder.number("at")
    coefficient = holder.number("coefficient", required=True)
    precision = _precision(holder, coefficient)
    if form is not None and form is not TermForm.INTERACTION:
        for key in ("with", "at"):
            if holder.content.get(key) is not None:
                holder.wrong(
                    key,
                    ErrorCode.MODERATOR_MISPLACED,
                    f"A {form} term has no '{key}'; only an interaction has a moderator. The exposure's own mean "
                    "is stated once, under 'exposure'.",
                )
    if form is TermForm.LOGARITHM and exposure is not None:
        if exposure.scale is VariableScale.LOGARITHM:
            holder.wrong(
                "form",
                ErrorCode.LOGARITHM_TWICE,
                "The exposure already enters as a logarithm, so its own term is 'linear'.",
            )
        elif exposure.mean is not None and exposure.mean.value <= 0:
            holder.wrong(
                "form",
                ErrorCode.MEAN_NOT_POSITIVE,
                f"The exposure's mean is {exposure.mean}, and only a variable above zero has a logarithm.",
            )
    if form is None or coefficient is None:
        return None
    return Term(form, coefficient, precision, moderator, at)


def _covariances(top: _Object, terms: tuple[Term, ...], *, names_are_known: bool) -> tuple[Covariance, ...] | None:
    holders = top.list_below("covariances", "a covariance")
    if holders is None:
        return None
    names = {term.name for term in terms}
    found: dict[frozenset[str], Covariance] = {}
    for holder in holders:
        holder.allow(("between", "value"))
        value = holder.number("value", required=True)
        between = holder.get("between", required=True)
        if between is None:
            continue
        if (
            not isinstance(between, list | tuple)
            or len(between) != 2
            or not all(isinstance(name, str) for name in between)
        ):
            holder.wrong("between", ErrorCode.NOT_A_LIST, "'between' is a list of the names of two terms.")
            continue
        first, second = between
        unknown = [name for name in (first, second) if name not in names]
        if unknown and names_are_known:
            holder.wrong(
                "between",
                ErrorCode.TERM_UNKNOWN,
                f"No term is called {unknown[0][:60]!r}. The terms are {', '.join(sorted(names)) or 'none'}.",
            )
        elif first == second:
            holder.wrong(
                "between",
                ErrorCode.COVARIANCE_OF_ONE_TERM,
                f"'{first}' is named twice. The variance of a term is the square of its standard error.",
            )
        elif frozenset((first, second)) in found:
            holder.wrong(
                "between", ErrorCode.COVARIANCE_REPEATED, f"The covariance of '{first}' and '{second}' is given twice."
            )
        elif value is not None:
            found[frozenset((first, second))] = Covariance((first, second), value)
    return tuple(found.values())


def _marginal_effect(top: _Object) -> MarginalEffect | None:
    holder = top.below("marginal_effect", "the marginal effect")
    if holder is None:
        return None
    holder.allow(("estimate", *_PRECISION_KEYS))
    estimate = holder.number("estimate")
    return MarginalEffect(estimate, _precision(holder, estimate))


# --- shared parts -------------------------------------------------------------------------------------------


def _precision(holder: _Object, estimate: Printed | None) -> Precision:
    error = holder.number("standard_error")
    if error is not None and error.value <= 0:
        repair = (
            "It was printed with too few digits: leave it out and give t, p or the interval instead."
            if error.value == 0
            else "Check for a coefficient in the place of its error."
        )
        holder.wrong(
            "standard_error",
            ErrorCode.STANDARD_ERROR_NOT_POSITIVE,
            f"A standard error is above zero, and {error} is not. {repair}",
        )
    f = holder.number("f")
    if f is not None and f.value < 0:
        holder.wrong("f", ErrorCode.F_NEGATIVE, f"An F statistic is never below zero, and {f} is. Is it a t?")
    return Precision(
        standard_error=error,
        t=holder.number("t"),
        z=holder.number("z"),
        interval=_interval(holder, estimate),
        p=_probability(holder, "p"),
        p_below=_probability(holder, "p_below"),
        f=f,
        degrees_of_freedom=_degrees_of_freedom(holder),
    )


def _interval(holder: _Object, estimate: Printed | None) -> Interval | None:
    inner = holder.below("interval", "an interval")
    if inner is None:
        return None
    inner.allow(("level", "low", "high"))
    level = inner.number("level", required=True)
    low = inner.number("low", required=True)
    high = inner.number("high", required=True)
    if level is not None and not SMALLEST_LEVEL <= level.value < 1:
        share = level.value / 100
        hint = f" Write {share} for {level} %." if 0 < share < 1 else ""
        inner.wrong(
            "level",
            ErrorCode.LEVEL_OUTSIDE_UNIT_INTERVAL,
            f"The level {level} is not a share between {SMALLEST_LEVEL} and 1.{hint}",
        )
        level = None
    if level is None or low is None or high is None:
        return None
    if low.value > high.value:
        inner.wrong(
            "low",
            ErrorCode.LIMITS_SWAPPED,
            f"The lower limit {low} is above the upper limit {high}. Swap them, or check for a missing minus sign.",
        )
        return None
    if low.value == high.value:
        inner.wrong(
            "high",
            ErrorCode.INTERVAL_WITHOUT_WIDTH,
            f"Both limits are {low}. If rounding made them equal, leave the interval out and give the standard "
            "error, t or p instead.",
        )
        return None
    # Compared after rounding: an estimate of 0.2 may lie at the limit 0.19 when it stands for 0.195.
    if estimate is not None and (estimate.high < low.low or estimate.low > high.high):
        holder.wrong(
            "interval",
            ErrorCode.INTERVAL_EXCLUDES_ESTIMATE,
            f"{estimate} lies outside its own {percent(level)} % interval, {low} to {high}. Check for a missing "
            "minus sign or a swapped column.",
        )
        return None
    return Interval(level, low, high)


def percent(level: Printed) -> str:
    """A level of 0.95 as the words 95."""
    return format((level.value * 100).normalize(), "f")


def _probability(holder: _Object, key: str) -> Printed | None:
    value = holder.number(key)
    if value is None:
        return None
    if not 0 <= value.value <= 1:
        holder.wrong(
            key,
            ErrorCode.P_OUTSIDE_UNIT_INTERVAL,
            f"A p value lies between 0 and 1, and {value} does not. Is it the test statistic?",
        )
        return None
    if key == "p_below" and value.value == 0:
        holder.wrong(
            key,
            ErrorCode.P_OUTSIDE_UNIT_INTERVAL,
            'No p value is below 0. Give the threshold that the table states, such as "0.001".',
        )
        return None
    return value


def _degrees_of_freedom(holder: _Object) -> int | Printed | None:
    # Satterthwaite's degrees of freedom are fractions; they come as text like every printed number.
    if isinstance(holder.content.get("degrees_of_freedom"), str):
        degrees = holder.number("degrees_of_freedom")
        if degrees is not None and not 1 <= degrees.value <= Decimal(LARGEST_COUNT):
            holder.wrong(
                "degrees_of_freedom",
                ErrorCode.DEGREES_OF_FREEDOM_TOO_SMALL,
                f"Degrees of freedom are at least 1, and {degrees} is out of range.",
            )
            return None
        return degrees
    return holder.count("degrees_of_freedom", smallest=1)


def _cluster(top: _Object) -> Cluster | None:
    holder = top.below("cluster", "the cluster block")
    if holder is None:
        return None
    holder.allow(("average_size", "intraclass_correlation", "accounted_for"))
    size = holder.number("average_size")
    if size is not None and size.value < 1:
        holder.wrong(
            "average_size",
            ErrorCode.CLUSTER_SIZE_TOO_SMALL,
            f"A cluster holds at least one unit, and {size} is fewer. Give the average number of units a cluster.",
        )
    icc = holder.number("intraclass_correlation")
    if icc is not None and not 0 <= icc.value <= 1:
        holder.wrong(
            "intraclass_correlation",
            ErrorCode.INTRACLASS_CORRELATION_OUTSIDE_RANGE,
            f"An intraclass correlation lies between 0 and 1, and {icc} does not.",
        )
    accounted_for = holder.truth("accounted_for")
    return None if accounted_for is None else Cluster(accounted_for, size, icc)


_READERS = {
    Kind.READY_MADE_EFFECT.value: _ready_made_effect,
    Kind.TWO_PROPORTIONS.value: _two_proportions,
    Kind.TWO_MEANS.value: _two_means,
    Kind.CORRELATION.value: _correlation,
    Kind.REGRESSION.value: _regression,
}
