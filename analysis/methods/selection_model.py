"""Step-function selection model: how much less likely is an estimate to be seen when its p-value is worse?

Hedges 1992 (*Statistical Science* 7); Vevea & Hedges 1995 (*Psychometrika* 60). Before selection y_i ~ N(μ, η_i²),
η_i² = v_i + τ². An estimate whose p-value falls in interval j is seen with relative chance ω_j, ω of the first interval
being 1. With B_ij the chance that estimate i falls in interval j before selection,

    log L = Σ_i [ln ω_{j(i)} − ½ln(2πη_i²) − (y_i−μ)²/(2η_i²) − ln Σ_j ω_j B_ij]

`one-sided`: p = 1 − Φ(y/SE), so that a direction is favoured. `two-sided`: p = 2(1 − Φ(|y|/SE)). Without selection all
ω are 1; twice the gain in log likelihood over that is compared with χ² on as many degrees of freedom as there are free
ω.

The likelihood can have several maxima and long ridges. The search starts from several weights and several τ², follows
the exact gradient, ends with Newton steps, and the highest end wins. Standard errors come from the observed
information; with τ² at its boundary 0 they are those of the model with τ² = 0.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import optimize, special

from .errors import InvalidInput, NotEstimable
from .inputs import FloatArray, IntArray, check_choice, check_level, effects_and_variances, scaled
from .pooling import PooledEffect, pool_effects
from .weighted_regression import Coefficient, coefficient

SIDES = ("one-sided", "two-sided")
DIRECTIONS = ("positive", "negative")
MODELS = ("random-effects", "common-effect")

FLAGS = {
    "between-study-variance-at-zero": "The estimate of the between-study variance is 0, its lowest possible value.",
    "few-estimates-in-an-interval": "An interval of p-values holds fewer than five estimates, so its weight is hardly "
    "determined.",
}

FEW = 5
_START_WEIGHTS = (1.0, 0.3, 0.05, 3.0)
_MOST_STEPS = 60
_MOST_POLISHED = 3
_FARTHEST = 15.0
"""Bound on |ln ω|: a weight beyond 3 million to 1 is not a finding but a likelihood without a maximum."""

_OUT_OF_SIGHT = 300.0
"""Newton's steps give up where |ln ω| or ln(1 + τ²/c) has grown beyond this."""

_LOG_2PI = math.log(2.0 * math.pi)


@dataclass(frozen=True, slots=True)
class SelectionWeight:
    """Relative chance ω of being seen for estimates with p in (`p_low`, `p_high`].

    standard_error, low, high : from the observed information, limits even in ln ω; None for the first interval, whose
    weight is 1 by definition.
    """

    p_low: float
    p_high: float
    count: int
    value: float
    standard_error: float | None
    low: float | None
    high: float | None


@dataclass(frozen=True, slots=True, eq=False)
class SelectionModel:
    """Step-function selection model.

    effect : μ, the mean before selection, normal interval.  unselected : the maximum-likelihood fit without selection.
    tau2, tau2_standard_error : before selection; no standard error at the boundary or for model `common-effect`.
    weights : one for each interval of p, from the smallest p.
    log_likelihood, unselected_log_likelihood : of the data, with the −½k ln 2π constant.
    likelihood_ratio, degrees_of_freedom, p : test that all weights are 1.
    """

    effect: Coefficient
    tau2: float
    tau2_standard_error: float | None
    weights: tuple[SelectionWeight, ...]
    unselected: PooledEffect
    log_likelihood: float
    unselected_log_likelihood: float
    likelihood_ratio: float
    degrees_of_freedom: int
    p: float
    sides: str
    direction: str
    model: str
    k: int
    converged: bool
    flags: tuple[str, ...]
    estimable: Literal[True] = True


@dataclass(frozen=True, slots=True, eq=False)
class _Likelihood:
    """Log likelihood in scaled units of (μ, x, ln ω₂ … ln ω_m), where τ² = c(eˣ − 1) with c the smallest variance."""

    y: FloatArray
    v: FloatArray
    edges: FloatArray
    interval: IntArray
    two_sided: bool

    @property
    def smallest(self) -> float:
        return float(self.v.min())

    def tau2(self, x: float) -> float:
        """τ² of a coordinate x."""
        return self.smallest * math.expm1(x)

    def coordinate(self, tau2: float) -> float:
        """x of a τ²."""
        return math.log1p(tau2 / self.smallest)

    def at(self, parameters: FloatArray) -> tuple[float, FloatArray]:
        """Value and gradient."""
        mean, x = float(parameters[0]), float(parameters[1])
        omega = np.concatenate([[1.0], np.exp(parameters[2:])])
        total = self.v + self.tau2(x)
        eta = np.sqrt(total)
        distance = self.y - mean
        chance, by_mean, by_tau2 = self._chances(mean, eta)
        seen = chance @ omega
        value = (
            float(np.log(omega)[self.interval].sum())
            - 0.5 * (self.y.size * _LOG_2PI + float(np.log(total).sum()))
            - 0.5 * float((distance * distance / total).sum())
            - float(np.log(seen).sum())
        )
        gradient = np.empty_like(parameters)
        gradient[0] = float((distance / total - by_mean @ omega / seen).sum())
        slope = 0.5 * (distance * distance / total - 1.0) / total - by_tau2 @ omega / seen
        gradient[1] = float(slope.sum()) * self.smallest * math.exp(x)
        counts = np.bincount(self.interval, minlength=omega.size)
        gradient[2:] = (counts - omega * (chance / seen[:, np.newaxis]).sum(axis=0))[1:]
        return value, gradient

    def _chances(self, mean: float, eta: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """B (k, m) and its derivatives in μ and τ²."""
        chance, by_mean, by_tau2 = self._between(self.edges, mean, eta)
        if self.two_sided:
            others = self._between(-self.edges[::-1], mean, eta)
            chance, by_mean, by_tau2 = (a + b[:, ::-1] for a, b in zip((chance, by_mean, by_tau2), others, strict=True))
        return chance, by_mean, by_tau2

    def _between(self, edges: FloatArray, mean: float, eta: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Normal chances between neighbouring falling edges (in units of SE), and their derivatives."""
        a = (edges * np.sqrt(self.v)[:, np.newaxis] - mean) / eta[:, np.newaxis]
        upper, lower = a[:, :-1], a[:, 1:]
        # Differences are taken in the tail where both terms are small.
        flip = lower > 0.0
        chance = np.where(flip, special.ndtr(-lower) - special.ndtr(-upper), special.ndtr(upper) - special.ndtr(lower))
        finite = np.isfinite(a)
        at = np.where(finite, a, 0.0)
        density = np.where(finite, np.exp(-0.5 * at * at) / math.sqrt(2.0 * math.pi), 0.0)
        by_mean = -density / eta[:, np.newaxis]
        by_tau2 = -0.5 * density * at / (eta * eta)[:, np.newaxis]
        return chance, by_mean[:, :-1] - by_mean[:, 1:], by_tau2[:, :-1] - by_tau2[:, 1:]

    def hessian(self, parameters: FloatArray, steps: FloatArray) -> FloatArray:
        """Second derivatives: central differences of the exact gradient, extrapolated from two step lengths."""
        size = parameters.size
        rows = np.empty((size, size))
        for i in range(size):
            estimates = []
            for factor in (1.0, 2.0):
                step = np.zeros(size)
                step[i] = factor * steps[i]
                ahead = self.at(parameters + step)[1]
                behind = self.at(parameters - step)[1]
                estimates.append((ahead - behind) / (2.0 * factor * steps[i]))
            rows[i] = (4.0 * estimates[0] - estimates[1]) / 3.0
        symmetric: FloatArray = 0.5 * (rows + rows.T)
        return symmetric


def selection_model(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    cut_points: Sequence[float] = (0.025,),
    sides: str = "one-sided",
    direction: str = "positive",
    model: str = "random-effects",
    level: float = 0.95,
) -> SelectionModel | NotEstimable:
    """Fit a step-function selection model by maximum likelihood; the module docstring has the equations.

    Parameters
    ----------
    effects, variances : (k,) arrays as for `pool_effects`
    cut_points : p-values, rising, between 0 and 1, at which the chance of being seen may change. p equal to a cut point
        belongs to the interval below it.
    sides : of the p-values, `one-sided` or `two-sided`
    direction : for one-sided p-values, the sign of effect that has small ones
    model : `random-effects`, or `common-effect` for τ² = 0 by assumption

    NotEstimable when an interval of p-values holds no estimate (its weight then is not determined, or is 0), when there
    are not more estimates than parameters, or when the likelihood has no maximum (it rises along a ridge).
    Raises InvalidInput, UnknownChoice.
    """
    check_choice("sides", sides, SIDES)
    check_choice("direction", direction, DIRECTIONS)
    check_choice("model", model, MODELS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    cuts = np.asarray(cut_points, dtype=np.float64)
    if cuts.ndim != 1 or not cuts.size or not ((cuts > 0.0) & (cuts < 1.0)).all() or (np.diff(cuts) <= 0.0).any():
        raise InvalidInput("cut_points", "must be rising p-values between 0 and 1")
    k = y.size
    random = model == "random-effects"
    parameters = cuts.size + (2 if random else 1)
    if k <= parameters:
        return NotEstimable(f"A selection model with {parameters} parameters needs more estimates than that.", k)
    sign = -1.0 if direction == "negative" and sides == "one-sided" else 1.0
    two_sided = sides == "two-sided"
    z = sign * y / np.sqrt(v)
    p = 2.0 * special.ndtr(-np.abs(z)) if two_sided else special.ndtr(-z)
    interval = np.searchsorted(cuts, p, side="left").astype(np.int64)
    counts = np.bincount(interval, minlength=cuts.size + 1)
    limits = [0.0, *cuts.tolist(), 1.0]
    if (counts == 0).any():
        j = int(np.argmin(counts))
        return NotEstimable(f"No estimate has a p-value between {limits[j]:g} and {limits[j + 1]:g}.", k)
    unselected = pool_effects(
        y,
        v,
        model=model,
        heterogeneity="maximum-likelihood",
        interval="normal",
        level=level,
    )
    if isinstance(unselected, NotEstimable):
        return unselected
    data = scaled(y, v)
    # The p-values compare effects with 0, so the origin must stay where it is.
    edges = special.ndtri(1.0 - (0.5 * cuts if two_sided else cuts))
    likelihood = _Likelihood(
        y=sign * y / data.unit,
        v=data.variances,
        edges=np.concatenate([[np.inf], edges, [0.0 if two_sided else -np.inf]]),
        interval=interval,
        two_sided=two_sided,
    )
    start_mean = sign * unselected.value / data.unit
    start_tau2 = unselected.tau2 / data.unit**2
    found = _maximum(likelihood, start_mean, start_tau2, cuts.size, random)
    if found is None:
        return NotEstimable("The likelihood of the selection model has no clear maximum on these estimates.", k)
    best, covariance, at_zero = found
    return _result(
        likelihood, best, covariance, unselected, start_tau2, start_mean,
        limits=limits, counts=counts, unit=data.unit, sign=sign, at_zero=random and at_zero,
        sides=sides, direction=direction, model=model, level=level,
    )  # fmt: skip


def _maximum(
    likelihood: _Likelihood, mean: float, tau2: float, n_weights: int, random: bool
) -> tuple[FloatArray, FloatArray, bool] | None:
    """Highest maximum from all starts: parameters, their covariance, and whether τ² is 0; None if there is none."""
    spread = float(np.abs(likelihood.y - mean).max()) + math.sqrt(float(likelihood.v.max()))
    x_most = likelihood.coordinate(100.0 * spread**2)
    bounds = [(mean - 50.0 * spread, mean + 50.0 * spread), (0.0, x_most if random else 0.0)]
    bounds += [(-_FARTHEST, _FARTHEST)] * n_weights
    typical = float(np.median(likelihood.v))
    tau2_starts = sorted({tau2, 0.25 * tau2 + 0.25 * typical, 0.0}) if random else [0.0]
    ends: list[tuple[float, FloatArray]] = []
    for start_tau2 in tau2_starts:
        for weight in _START_WEIGHTS:
            start = np.array([mean, likelihood.coordinate(start_tau2), *([math.log(weight)] * n_weights)])
            found = optimize.minimize(
                lambda at: tuple(-part for part in likelihood.at(at)),
                start,
                jac=True,
                method="L-BFGS-B",
                bounds=bounds,
                options={"maxiter": 500, "ftol": 1e-13, "gtol": 1e-9},
            )
            ends.append((-float(found.fun), np.asarray(found.x, dtype=np.float64)))
    ends.sort(key=lambda end: -end[0])
    highest = ends[0][0]
    best: tuple[float, FloatArray, FloatArray, bool] | None = None
    tried: list[FloatArray] = []
    for height, place in ends:
        # Polishing gains next to nothing, so an end clearly below the best cannot overtake it.
        if height < highest - 1e-3 or len(tried) == _MOST_POLISHED:
            break
        if any(np.abs(place[1:] - other[1:]).max() < 0.01 for other in tried):
            continue
        tried.append(place)
        polished = _polish(likelihood, place, random)
        if polished is not None and (best is None or polished[0] > best[0]):
            best = polished
    if best is None or best[0] < highest - 1e-6:
        # The highest end was on a ridge or at a bound; a lower maximum is not the answer.
        return None
    if float(np.abs(best[1][2:]).max()) > 0.99 * _FARTHEST:
        return None
    return best[1], best[2], best[3]


def _polish(
    likelihood: _Likelihood, place: FloatArray, random: bool
) -> tuple[float, FloatArray, FloatArray, bool] | None:
    """Newton steps to the maximum near a place: height, parameters, covariance (0 for what is fixed), τ² at 0."""
    current = place.copy()
    error = 1.0 / math.sqrt(float((1.0 / (likelihood.v + likelihood.tau2(float(current[1])))).sum()))
    steps = np.full(current.size, 1e-3)
    steps[0] = 1e-3 * error
    if float(current[1]) < 1e-6:
        current[1] = 0.0
    height, gradient = likelihood.at(current)
    for _ in range(_MOST_STEPS):
        free = np.ones(current.size, dtype=np.bool_)
        free[1] = random and (current[1] > 0.0 or gradient[1] > 0.0)
        hessian = likelihood.hessian(current, steps)[np.ix_(free, free)]
        size = np.sqrt(np.abs(np.diag(hessian)))
        if not (size > 0.0).all():
            return None
        curvature = -hessian / np.outer(size, size)
        eigenvalues = np.linalg.eigvalsh(curvature)
        if eigenvalues[0] <= 1e-7:
            # Not a maximum here: add curvature until the step goes uphill.
            curvature += (1e-3 - eigenvalues[0]) * np.eye(size.size)
        direction = np.linalg.solve(curvature, gradient[free] / size) / size
        gain = float(direction @ gradient[free])
        if gain < 1e-18 * (1.0 + abs(height)) and eigenvalues[0] > 1e-7:
            # The last step is below what heights can tell apart, but not below what the gradient knows.
            current[free] += direction
            current[1] = max(0.0, float(current[1]))
            covariance = np.zeros((current.size, current.size))
            covariance[np.ix_(free, free)] = np.linalg.inv(curvature) / np.outer(size, size)
            return height, current, covariance, bool(current[1] == 0.0)
        if float(np.abs(current[1:]).max()) > _OUT_OF_SIGHT:
            return None
        # Logarithms move by 2 at most: one long step on a flat stretch could leave the range of floating point.
        length = min(1.0, 2.0 / max(1e-300, float(np.abs(direction[1:]).max(initial=0.0))))
        while True:
            trial = current.copy()
            trial[free] += length * direction
            trial[1] = max(0.0, float(trial[1]))
            trial_height, trial_gradient = likelihood.at(trial)
            if trial_height >= height - 1e-13 * (1.0 + abs(height)):
                break
            length *= 0.5
            if length < 1e-10:
                return None
        moved = float(np.abs(trial - current).max())
        current, height, gradient = trial, trial_height, trial_gradient
        if moved == 0.0:
            if eigenvalues[0] <= 1e-7:
                return None
            covariance = np.zeros((current.size, current.size))
            covariance[np.ix_(free, free)] = np.linalg.inv(curvature) / np.outer(size, size)
            return height, current, covariance, bool(current[1] == 0.0)
    return None


def _result(
    likelihood: _Likelihood,
    best: FloatArray,
    covariance: FloatArray,
    unselected: PooledEffect,
    start_tau2: float,
    start_mean: float,
    *,
    limits: list[float],
    counts: IntArray,
    unit: float,
    sign: float,
    at_zero: bool,
    sides: str,
    direction: str,
    model: str,
    level: float,
) -> SelectionModel:
    k = likelihood.y.size
    z = float(special.ndtri(0.5 + 0.5 * level))
    errors = np.sqrt(np.maximum(0.0, np.diag(covariance)))
    weights = [SelectionWeight(limits[0], limits[1], int(counts[0]), 1.0, None, None, None)]
    for j in range(1, counts.size):
        log_weight, log_error = float(best[1 + j]), float(errors[1 + j])
        value = math.exp(log_weight)
        # Far out the limits say nothing; they stay inside the range of floating point.
        low, high = (math.exp(min(700.0, log_weight + side * z * log_error)) for side in (-1.0, 1.0))
        weights.append(SelectionWeight(limits[j], limits[j + 1], int(counts[j]), value, value * log_error, low, high))
    constant = -k * math.log(unit)
    height = likelihood.at(best)[0] + constant
    plain = likelihood.at(np.array([start_mean, likelihood.coordinate(start_tau2), *([0.0] * (counts.size - 1))]))[0]
    plain += constant
    ratio = max(0.0, 2.0 * (height - plain))
    has_error = model == "random-effects" and not at_zero
    x = float(best[1])
    flags = []
    if at_zero:
        flags.append("between-study-variance-at-zero")
    if int(counts.min()) < FEW:
        flags.append("few-estimates-in-an-interval")
    return SelectionModel(
        effect=coefficient(sign * unit * float(best[0]), unit * float(errors[0]), None, level),
        tau2=likelihood.tau2(x) * unit**2,
        # dτ²/dx = c·eˣ; at a maximum the information transforms with the derivative.
        tau2_standard_error=likelihood.smallest * math.exp(x) * float(errors[1]) * unit**2 if has_error else None,
        weights=tuple(weights),
        unselected=unselected,
        log_likelihood=height,
        unselected_log_likelihood=plain,
        likelihood_ratio=ratio,
        degrees_of_freedom=counts.size - 1,
        p=float(special.chdtrc(counts.size - 1, ratio)),
        sides=sides,
        direction=direction,
        model=model,
        k=k,
        converged=True,
        flags=tuple(flags),
    )


def selection_log_likelihood(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    mean: float,
    tau2: float,
    weights: Sequence[float],
    cut_points: Sequence[float] = (0.025,),
    sides: str = "one-sided",
) -> float:
    """Log likelihood at given parameters, with the −½k ln 2π constant; `weights` are those after the first, which is 1.

    effects, variances : (k,) arrays, at least one row; tau2 ≥ 0; as many weights (> 0) as cut points.
    Raises InvalidInput, UnknownChoice.
    """
    check_choice("sides", sides, SIDES)
    y, v = effects_and_variances(effects, variances)
    cuts = np.asarray(cut_points, dtype=np.float64)
    omega = np.asarray(weights, dtype=np.float64)
    if omega.shape != cuts.shape or not (omega > 0.0).all():
        raise InvalidInput("weights", "must be positive, one for each cut point")
    if not (y.size and tau2 >= 0.0):
        raise InvalidInput("tau2" if y.size else "effects", "must be at least 0" if y.size else "must not be empty")
    two_sided = sides == "two-sided"
    z = y / np.sqrt(v)
    p = 2.0 * special.ndtr(-np.abs(z)) if two_sided else special.ndtr(-z)
    edges = special.ndtri(1.0 - (0.5 * cuts if two_sided else cuts))
    likelihood = _Likelihood(
        y=y,
        v=v,
        edges=np.concatenate([[np.inf], edges, [0.0 if two_sided else -np.inf]]),
        interval=np.searchsorted(cuts, p, side="left").astype(np.int64),
        two_sided=two_sided,
    )
    return likelihood.at(np.array([mean, likelihood.coordinate(tau2), *np.log(omega)]))[0]
