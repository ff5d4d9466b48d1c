"""How far from 0 must z be at each look, so that looking again and again keeps the promised error rate?

At looks with information fractions 0 < t_1 < … < t_K ≤ 1 the statistics B_k = Z_k√t_k have independent normal
increments of variance t_k − t_{k−1} (and mean ϑ(t_k − t_{k−1}) for a drift ϑ, the expected Z at t = 1). The density of
B_k on the paths that have not crossed before is found by recursive numerical integration (Armitage, McPherson & Rowe
1969):

    f_1 = normal density,   f_k(x) = ∫ f_{k−1}(u) φ((x−u)/√Δ_k)/√Δ_k du  over the region that continued at look k−1

Boundaries are two-sided and symmetric. **Spending** (Lan & DeMets 1983): c_k is such that the chance of first crossing
at look k is α(t_k) − α(t_{k−1}):

    obrien-fleming-type             α(t) = 4(1 − Φ(z_{α/4}/√t)), the one-sided function for α/2 doubled
    obrien-fleming-type-undoubled   α(t) = 2(1 − Φ(z_{α/2}/√t)), the one-sided function put to two-sided α as it is
    pocock-type                     α(t) = α ln(1 + (e−1)t)
    linear                          α(t) = αt

Both O'Brien-Fleming types are in use and differ in the second digit of the first bounds; the first is the published
one.

**Classical**, equally spaced looks: Pocock 1977, one constant; O'Brien & Fleming 1979, c√(K/k); Haybittle 1971 and Peto
et al. 1976, 3 at all looks but the last, which restores the level.

**Futility**, an inner wedge |z| < a_k in which to stop for lack of effect: β is spent by the same kind of function at
the drift at which a_K meets c_K (Pampallona & Tsiatis 1994 for the shape; here with spending). It does not bind: the
outer boundaries are those without it, so ignoring it keeps the level.

A guard against over-reading an update, not the main analysis: the Cochrane Handbook (chapter 22) discourages sequential
methods as the main analysis of a review.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import optimize, special

from .compiled import kernel
from .errors import InvalidInput, NotEstimable
from .inputs import FloatArray, check_choice, float_array

SPENDING = ("obrien-fleming-type", "obrien-fleming-type-undoubled", "pocock-type", "linear")
CLASSICAL = ("pocock", "obrien-fleming", "haybittle-peto")

HAYBITTLE_PETO_INTERIM = 3.0

LARGEST_Z = 37.5
"""Beyond this the normal tail is below the smallest number; such a bound is reported as infinite."""

SMALLEST_STEP = 1e-7
"""Smallest increase of the information fraction, relative to the fraction, that makes a look of its own."""

_POINTS = 16
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(_POINTS)
_PANEL = 2.0
_MOST_LOOKS = 2000


def cumulative_alpha(spending: str, fractions: npt.ArrayLike, alpha: float = 0.05) -> FloatArray:
    """Two-sided error spent up to each information fraction; fractions above 1 count as 1.

    spending : one of :data:`SPENDING` (equations in the module docstring).  fractions : (K,) each > 0.
    Raises UnknownChoice, InvalidInput.
    """
    check_choice("spending", spending, SPENDING)
    _check_probability("alpha", alpha)
    t = np.minimum(1.0, float_array("fractions", fractions))
    if (t <= 0.0).any():
        raise InvalidInput("fractions", "must be positive", int(np.argmin(t > 0.0)))
    spent: FloatArray
    if spending == "obrien-fleming-type":
        spent = 4.0 * special.ndtr(float(special.ndtri(0.25 * alpha)) / np.sqrt(t))
    elif spending == "obrien-fleming-type-undoubled":
        spent = 2.0 * special.ndtr(float(special.ndtri(0.5 * alpha)) / np.sqrt(t))
    elif spending == "pocock-type":
        spent = alpha * np.log1p((math.e - 1.0) * t)
    else:
        spent = alpha * t
    return np.where(t >= 1.0, alpha, spent)


def _check_probability(name: str, value: float) -> None:
    if not 0.0 < value < 1.0:
        raise InvalidInput(name, f"must lie between 0 and 1, not {value}")


def _check_fractions(fractions: npt.ArrayLike) -> FloatArray:
    t = float_array("fractions", fractions)
    if t.size == 0 or t.size > _MOST_LOOKS:
        raise InvalidInput("fractions", f"must name between 1 and {_MOST_LOOKS} looks, not {t.size}")
    before = np.concatenate([[0.0], t[:-1]])
    rising = t - before > SMALLEST_STEP * t
    if not rising.all():
        raise InvalidInput("fractions", "must be positive and rise from look to look", int(np.argmin(rising)))
    if t[-1] > 1.0 + 1e-12:
        raise InvalidInput("fractions", "must not exceed 1", int(np.argmax(t > 1.0)))
    return np.minimum(t, 1.0)


@kernel
def _carry(nodes: np.ndarray, mass: np.ndarray, targets: np.ndarray, step: float, shift: float) -> np.ndarray:
    """Density at targets (rising) after an increment of variance step and mean shift, from mass at nodes (rising)."""
    deviation = np.sqrt(step)
    scale = 1.0 / (deviation * np.sqrt(2.0 * np.pi))
    result = np.zeros(targets.shape[0])
    first = 0
    for i in range(targets.shape[0]):
        x = targets[i] - shift
        while first < nodes.shape[0] and nodes[first] < x - 38.0 * deviation:
            first += 1
        total = 0.0
        for j in range(first, nodes.shape[0]):
            d = (x - nodes[j]) / deviation
            if d < -38.0:
                break
            total += mass[j] * np.exp(-0.5 * d * d)
        result[i] = scale * total
    return result


@kernel
def _upper_tail(nodes: np.ndarray, mass: np.ndarray, bound: float, step: float, shift: float) -> float:
    """Chance of landing above a bound after an increment, from mass at nodes."""
    root = np.sqrt(2.0 * step)
    total = 0.0
    for j in range(nodes.shape[0]):
        if mass[j] > 0.0:
            total += mass[j] * 0.5 * math.erfc((bound - shift - nodes[j]) / root)
    return total


@dataclass(frozen=True, slots=True, eq=False)
class _Paths:
    """Paths that have not crossed: B at Gauss-Legendre nodes with probability mass (density times weight)."""

    nodes: FloatArray
    mass: FloatArray

    def above(self, bound: float, step: float, shift: float = 0.0) -> float:
        """Chance of first crossing `bound` from below at the next look."""
        return float(_upper_tail(self.nodes, self.mass, bound, step, shift))

    def carried(
        self, regions: Sequence[tuple[float, float]], step: float, next_step: float, shift: float = 0.0
    ) -> _Paths:
        """The paths that continue at the next look inside the regions (rising, apart)."""
        nodes, weights = _panels(regions, step, next_step)
        return _Paths(nodes, weights * _carry(self.nodes, self.mass, nodes, step, shift))


def _start() -> _Paths:
    return _Paths(np.zeros(1), np.ones(1))


def _panels(regions: Sequence[tuple[float, float]], step: float, next_step: float) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes in panels of at most two standard deviations of the increments on either side."""
    width = _PANEL * math.sqrt(min(step, next_step))
    all_nodes, all_weights = [], []
    for low, high in regions:
        if not high > low:
            continue
        edges = np.linspace(low, high, 1 + max(1, math.ceil((high - low) / width)))
        half = 0.5 * np.diff(edges)
        centres = 0.5 * (edges[1:] + edges[:-1])
        all_nodes.append((centres[:, np.newaxis] + half[:, np.newaxis] * _NODES).ravel())
        all_weights.append((half[:, np.newaxis] * _WEIGHTS).ravel())
    if not all_nodes:
        return np.zeros(1), np.zeros(1)
    return np.concatenate(all_nodes), np.concatenate(all_weights)


def _bound_for(chance: Callable[[float], float], target: float, start: float) -> float:
    """z at which a falling chance meets the target; infinite beyond :data:`LARGEST_Z`, 0 if it starts lower."""
    if target <= 0.0 or chance(LARGEST_Z) > target:
        return math.inf
    if chance(0.0) <= target:
        return 0.0
    goal = math.log(target)
    found: float = optimize.brentq(
        lambda z: math.log(max(chance(z), 5e-324)) - goal, 0.0, LARGEST_Z, xtol=1e-13, rtol=1e-14, maxiter=200
    )
    return found


def _steps(t: FloatArray) -> FloatArray:
    steps: FloatArray = np.diff(t, prepend=0.0)
    return steps


def _next_step(steps: FloatArray, look: int) -> float:
    return float(steps[min(look + 1, steps.size - 1)])


def _reach(bound: float, t: float) -> float:
    """Half-width of the region that continues: no mass to speak of lies beyond LARGEST_Z."""
    return min(bound, LARGEST_Z) * math.sqrt(t)


@dataclass(frozen=True, slots=True, eq=False)
class Boundaries:
    """Two-sided boundaries on z at each look.

    fractions : (K,) information fractions.  alpha_spent : (K,) cumulative, as the plan says.
    bounds : (K,) z, infinite where what may be spent is too little for any z up to :data:`LARGEST_Z`.
    nominal_p : (K,) two-sided p of the bounds.  crossing : (K,) chance, without effect, to have crossed by then.
    name : of the spending function or the classical boundary.
    """

    fractions: FloatArray
    alpha_spent: FloatArray
    bounds: FloatArray
    nominal_p: FloatArray
    crossing: FloatArray
    name: str
    alpha: float
    estimable: Literal[True] = True


def spending_boundaries(
    fractions: npt.ArrayLike, *, spending: str = "obrien-fleming-type", alpha: float = 0.05
) -> Boundaries:
    """Boundaries that spend α as information accrues (Lan & DeMets 1983; DeMets & Lan 1994).

    fractions : (K,) information fractions, rising by more than 1e-7 of themselves, at most 1; 1 to 2,000 looks. If the
        last is below 1, part of α is left. Bounds are exact to about 1e-9. Raises InvalidInput, UnknownChoice.
    """
    t = _check_fractions(fractions)
    spent = cumulative_alpha(spending, t, alpha)
    steps = _steps(t)
    paths = _start()
    bounds = np.empty(t.size)
    crossing = np.empty(t.size)
    crossed = 0.0
    for look in range(t.size):
        root = math.sqrt(float(t[look]))
        step = float(steps[look])
        here = paths

        def chance(z: float, here: _Paths = here, root: float = root, step: float = step) -> float:
            return 2.0 * here.above(z * root, step)

        bounds[look] = _bound_for(chance, float(spent[look]) - (float(spent[look - 1]) if look else 0.0), 2.0)
        crossed += chance(float(bounds[look])) if math.isfinite(bounds[look]) else 0.0
        crossing[look] = crossed
        reach = _reach(float(bounds[look]), float(t[look]))
        paths = here.carried([(-reach, reach)], step, _next_step(steps, look))
    return _boundaries(t, spent, bounds, crossing, spending, alpha)


def _boundaries(
    t: FloatArray, spent: FloatArray, bounds: FloatArray, crossing: FloatArray, name: str, alpha: float
) -> Boundaries:
    return Boundaries(
        fractions=t,
        alpha_spent=spent,
        bounds=bounds,
        nominal_p=2.0 * special.ndtr(-bounds),
        crossing=crossing,
        name=name,
        alpha=alpha,
    )


def crossing_probabilities(fractions: npt.ArrayLike, bounds: npt.ArrayLike, *, drift: float = 0.0) -> FloatArray:
    """Chance to have crossed above the upper bound by each look, (K,), when |z| at or beyond its bound stops.

    fractions : (K,) as for `spending_boundaries`.  bounds : (K,) z, each ≥ 0, infinite for a look that cannot stop.
    drift : expected z at information fraction 1. Without drift the chance to have crossed either bound is twice this.
    Raises InvalidInput.
    """
    t = _check_fractions(fractions)
    c = np.asarray(bounds, dtype=np.float64)
    if c.shape != t.shape or np.isnan(c).any() or (c < 0.0).any():
        raise InvalidInput("bounds", "must hold one z of at least 0 for each look")
    if not math.isfinite(drift):
        raise InvalidInput("drift", "must be finite")
    return _crossings(t, c, drift)


def _crossings(t: FloatArray, c: FloatArray, drift: float) -> FloatArray:
    steps = _steps(t)
    paths = _start()
    result = np.empty(t.size)
    crossed = 0.0
    for look in range(t.size):
        step = float(steps[look])
        shift = drift * step
        if math.isfinite(c[look]):
            crossed += paths.above(float(c[look]) * math.sqrt(float(t[look])), step, shift)
        result[look] = crossed
        if look + 1 < t.size:
            reach = _reach(float(c[look]), float(t[look]))
            low, high = -reach, reach
            if not math.isfinite(c[look]):
                centre = drift * float(t[look])
                low, high = min(low, centre - reach), max(high, centre + reach)
            paths = paths.carried([(low, high)], step, _next_step(steps, look), shift)
    return result


def drift_for_power(fractions: npt.ArrayLike, bounds: npt.ArrayLike, power: float = 0.80) -> float | NotEstimable:
    """Drift at which the chance to cross the upper bound is `power`.

    (drift/(z_{1−α/2} + z_power))² is the inflation of the information over that of a single look. NotEstimable when
    every bound is infinite. Arguments and errors as for :func:`crossing_probabilities`.
    """
    _check_probability("power", power)
    c = np.asarray(bounds, dtype=np.float64)
    crossing_probabilities(fractions, c)
    if not np.isfinite(c).any():
        return NotEstimable("No look can stop, so no effect is ever found.", 0)
    t = _check_fractions(fractions)
    high = 1.0
    while _crossings(t, c, high)[-1] < power:
        high *= 2.0
    found: float = optimize.brentq(
        lambda drift: float(_crossings(t, c, drift)[-1]) - power, -high, high, xtol=1e-12, rtol=1e-13
    )
    return found


def classical_boundaries(name: str, looks: int, *, alpha: float = 0.05) -> Boundaries:
    """Pocock, O'Brien-Fleming or Haybittle-Peto boundaries for equally spaced looks.

    name : one of :data:`CLASSICAL`.  looks : 1 to 2,000. Haybittle-Peto's interim bound is 3.
    Raises InvalidInput, UnknownChoice; InvalidInput also where looks at 3 alone exceed α.
    """
    check_choice("name", name, CLASSICAL)
    _check_probability("alpha", alpha)
    if not 1 <= looks <= _MOST_LOOKS:
        raise InvalidInput("looks", f"must be between 1 and {_MOST_LOOKS}, not {looks}")
    t = np.arange(1, looks + 1) / looks

    def bounds(constant: float) -> FloatArray:
        if name == "obrien-fleming":
            return constant / np.sqrt(t)
        c = np.full(looks, constant if name == "pocock" else HAYBITTLE_PETO_INTERIM)
        c[-1] = constant
        return c

    def excess(constant: float) -> float:
        return 2.0 * float(_crossings(t, bounds(constant), 0.0)[-1]) - alpha

    single = -float(special.ndtri(0.5 * alpha))
    if looks == 1:
        constant = single
    else:
        high = max(10.0, 2.0 * single)
        if excess(high) > 0.0:
            raise InvalidInput("alpha", f"is already exceeded by {looks - 1} looks at {HAYBITTLE_PETO_INTERIM:g}")
        constant = float(optimize.brentq(excess, 0.5 * single, high, xtol=1e-12, rtol=1e-13))
    c = bounds(constant)
    crossing = 2.0 * _crossings(t, c, 0.0)
    return _boundaries(t, crossing, c, crossing, name, alpha)


@dataclass(frozen=True, slots=True, eq=False)
class FutilityBoundaries:
    """Inner wedge: a z between −bound and bound may stop for lack of effect.

    bounds : (K,) z, 0 where nothing may stop yet, at the last look equal to the outer bound.
    beta_spent : (K,) cumulative chance of a wrong stop at `drift`.  drift : expected z at fraction 1 at which the wedge
    has the power `1 − beta`.  inflation : (drift/(z_{1−α/2} + z_{1−β}))², of the information over one look without
    wedge.
    """

    bounds: FloatArray
    beta_spent: FloatArray
    drift: float
    inflation: float
    outer: Boundaries
    name: str
    beta: float
    estimable: Literal[True] = True


def futility_boundaries(
    outer: Boundaries, *, beta: float = 0.20, spending: str = "obrien-fleming-type"
) -> FutilityBoundaries | NotEstimable:
    """Inner wedge that spends β, not binding; the module docstring says how.

    outer : boundaries whose last fraction is 1.  spending : function for β, as for α (two-sided in name only).
    NotEstimable when the looks end before all information is in. Raises InvalidInput, UnknownChoice.
    """
    _check_probability("beta", beta)
    t, c = outer.fractions, outer.bounds
    if t[-1] < 1.0:
        return NotEstimable("A futility boundary needs a last look at all of the information.", t.size)
    spent = cumulative_alpha(spending, t, beta)
    high = 1.0
    while _wedge(t, c, spent, high)[1] > beta:
        high *= 2.0
        if high > 1e6:
            return NotEstimable("No drift gives this power.", t.size)
    drift = float(optimize.brentq(lambda d: _wedge(t, c, spent, d)[1] - beta, 0.0, high, xtol=1e-11, rtol=1e-13))
    bounds, _ = _wedge(t, c, spent, drift)
    fixed = -float(special.ndtri(0.5 * outer.alpha)) - float(special.ndtri(beta))
    return FutilityBoundaries(
        bounds=bounds,
        beta_spent=spent,
        drift=drift,
        inflation=(drift / fixed) ** 2,
        outer=outer,
        name=spending,
        beta=beta,
    )


def _wedge(t: FloatArray, c: FloatArray, spent: FloatArray, drift: float) -> tuple[FloatArray, float]:
    """Inner bounds that spend β at a drift, and what is spent if the last one meets the outer bound."""
    steps = _steps(t)
    paths = _start()
    inner = np.zeros(t.size)
    total = 0.0
    for look in range(t.size):
        step, root = float(steps[look]), math.sqrt(float(t[look]))
        shift = drift * step
        widest = min(float(c[look]), LARGEST_Z)
        if look + 1 == t.size:
            inner[look] = widest
            total += _inside(paths, widest * root, step, shift)
            break
        allowed = float(spent[look]) - (float(spent[look - 1]) if look else 0.0)
        inner[look] = _inner_bound(paths, widest * root, step, shift, allowed) / root
        reach, gap = _reach(widest, float(t[look])), float(inner[look]) * root
        total += _inside(paths, gap, step, shift)
        paths = paths.carried([(-reach, -gap), (gap, reach)], step, _next_step(steps, look), shift)
    return inner, total


def _inside(paths: _Paths, bound: float, step: float, shift: float) -> float:
    """Chance that B lands between −bound and bound."""
    return max(0.0, paths.above(-bound, step, shift) - paths.above(bound, step, shift))


def _inner_bound(paths: _Paths, widest: float, step: float, shift: float, allowed: float) -> float:
    """Bound on B inside of which the chance to land is `allowed`, at most `widest`."""
    if _inside(paths, widest, step, shift) <= allowed:
        return widest
    if allowed <= 1e-15:
        return 0.0
    found: float = optimize.brentq(
        lambda bound: _inside(paths, bound, step, shift) - allowed, 0.0, widest, xtol=1e-13, rtol=1e-13
    )
    return found


@dataclass(frozen=True, slots=True)
class Look:
    """One look of a living review against its boundary.

    step : which of the steps given.  fraction : information so far over that required, 1 when it is exceeded.
    z : of the pooled answer.  bound, futility_bound : at this look; None where the information has not grown, or all of
        α was spent before, or there is no wedge.
    crossed : |z| ≥ bound.  within_futility : |z| < futility bound.  finding : `above`, `below`, `futile`, `open`, or
    `not-a-look` where there is no bound.
    """

    step: int
    fraction: float
    z: float
    bound: float | None
    futility_bound: float | None
    crossed: bool
    within_futility: bool
    finding: str


@dataclass(frozen=True, slots=True, eq=False)
class Monitoring:
    """Every step against its boundary.

    first_crossing : step of the first crossing, else None.  required_information : as given.
    reached : whether the required information has been reached.
    """

    looks: tuple[Look, ...]
    first_crossing: int | None
    required_information: float
    reached: bool
    spending: str
    alpha: float
    estimable: Literal[True] = True


def monitor(
    values: npt.ArrayLike,
    standard_errors: npt.ArrayLike,
    required_information: float,
    *,
    spending: str = "obrien-fleming-type",
    alpha: float = 0.05,
    beta: float | None = None,
) -> Monitoring | NotEstimable:
    """Hold the steps of a trail against spending boundaries.

    Parameters
    ----------
    values, standard_errors : (n,) pooled answer after each step and its standard error; information is 1/SE²
    required_information : see `information_size`, > 0, in the same unit
    spending, alpha : of the outer boundary.  beta : of an inner futility boundary, None for none

    A step whose information is not above the largest so far (under random effects it can fall) is not a look: nothing
    is spent, and there is no bound. The first step at or beyond the required information spends what is left of α and
    is the last look. After 2,000 looks nothing more is spent.

    NotEstimable when there are no steps. Raises InvalidInput, UnknownChoice.
    """
    check_choice("spending", spending, SPENDING)
    _check_probability("alpha", alpha)
    m, se = float_array("values", values), float_array("standard_errors", standard_errors)
    if m.size != se.size:
        raise InvalidInput("standard_errors", f"has {se.size} values for {m.size} steps")
    if not (se > 0.0).all():
        raise InvalidInput("standard_errors", "must be positive", int(np.argmin(se > 0.0)))
    if not 0.0 < required_information < math.inf:
        raise InvalidInput("required_information", f"must be positive, not {required_information}")
    if m.size == 0:
        return NotEstimable("There are no steps to look at.", 0)
    # 1/(SE²·required), without squaring what could leave the range.
    root = 1.0 / se / math.sqrt(required_information)
    fractions = np.minimum(1.0, np.where(root > 1.0, 1.0, root * root))
    at: list[int] = []
    largest = 0.0
    for step in range(m.size):
        t = float(fractions[step])
        if t > largest * (1.0 + 2.0 * SMALLEST_STEP) and t > 1e-12 and len(at) < _MOST_LOOKS:
            at.append(step)
            largest = t
        if largest >= 1.0:
            break
    outer = spending_boundaries(fractions[at], spending=spending, alpha=alpha) if at else None
    bound_of = dict(zip(at, outer.bounds.tolist(), strict=True)) if outer else {}
    inner_of: dict[int, float] = {}
    if beta is not None and outer is not None:
        inner_of = _planned_wedge(fractions[at], at, spending=spending, alpha=alpha, beta=beta)
    looks = tuple(
        _look(step, float(fractions[step]), float(m[step] / se[step]), bound_of.get(step), inner_of.get(step))
        for step in range(m.size)
    )
    crossings = [look.step for look in looks if look.crossed]
    return Monitoring(
        looks=looks,
        first_crossing=crossings[0] if crossings else None,
        required_information=required_information,
        reached=bool((fractions >= 1.0).any()),
        spending=spending,
        alpha=alpha,
    )


def _planned_wedge(t: FloatArray, at: list[int], *, spending: str, alpha: float, beta: float) -> dict[int, float]:
    """Inner bounds of the looks so far, on the plan that one more look comes when all information is in."""
    nearly_all = bool(t[-1] * (1.0 + 2.0 * SMALLEST_STEP) >= 1.0)
    planned = np.append(t[:-1] if nearly_all else t, 1.0)
    wedge = futility_boundaries(
        spending_boundaries(planned, spending=spending, alpha=alpha), beta=beta, spending=spending
    )
    if isinstance(wedge, NotEstimable):
        return {}
    return dict(zip(at, wedge.bounds.tolist(), strict=False))


def _look(step: int, fraction: float, z: float, bound: float | None, inner: float | None) -> Look:
    crossed = bound is not None and abs(z) >= bound
    futile = not crossed and inner is not None and abs(z) < inner
    if bound is None:
        finding = "not-a-look"
    elif crossed:
        finding = "above" if z > 0.0 else "below"
    else:
        finding = "futile" if futile else "open"
    return Look(step, fraction, z, bound, inner, crossed, futile, finding)
