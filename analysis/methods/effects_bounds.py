"""The standard errors that a combination c'b can have when covariances are not printed.

With z_i = c_i SE_i and R the correlation matrix of the coefficients, the variance is z'Rz. What is printed fixes
some entries of R, perhaps the variance of another combination u'Ru, and R is positive semidefinite; the
attainable standard errors are the root of the interval of z'Rz over all such R.

- Printed entries in blocks (none, all, or complete groups of terms): closed form. A block has the known length
  s = sqrt(z'Rz) within it, blocks are vectors of known length and free direction, so the largest standard error
  is their sum and the smallest max(0, 2 longest - sum). Without any covariance: max = sum |z|, min = max(0, 2
  max|z| - sum |z|).
- One entry open: its attainable interval is in closed form (Schur complement), and so is everything else.
- Otherwise: a linear objective over a linear matrix inequality, solved by following the central path of the
  log-determinant barrier with Newton steps (Boyd and Vandenberghe 2004, sections 11.2-11.3). The path is strictly
  inside, and the distance to the optimum is at most n/t, so the bounds are exact to a stated gap and never too
  narrow.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput

FloatArray = npt.NDArray[np.float64]
Pair = tuple[int, int]

MOST_TERMS = 12
# Variances are in units of (sum |z|)^2 during the search: below this a smallest variance is reported as zero.
_NEGLIGIBLE = 1e-10
_TARGET_GAP = 1e-12
_ACCEPTED_GAP = 1e-8


@dataclass(frozen=True, slots=True)
class KnownCombination:
    """Another combination of the same coefficients whose standard error is printed: between ``low`` and
    ``high``."""

    gradient: tuple[float, ...]
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class StandardErrorBounds:
    """The attainable standard errors of a combination.

    ``uncorrelated`` takes every covariance that is not printed as zero, kept within the bounds. ``shrinkage`` is
    1 when the printed covariances are possible; below 1 they are not, and were multiplied by it to become just
    possible. ``known_combination_used`` is ``None`` when none was given, false when no correlation matrix agrees
    with it. ``converged`` is false when the search did not settle and the wider bounds of the closed form are
    given instead.
    """

    low: float
    high: float
    uncorrelated: float
    method: Literal["closed-form", "one-open-covariance", "semidefinite"]
    shrinkage: float = 1.0
    known_combination_used: bool | None = None
    converged: bool = True

    @property
    def is_exact(self) -> bool:
        """Whether the printed numbers leave a single standard error, to rounding of the arithmetic."""
        return self.high - self.low <= 1e-9 * self.high


def standard_error_bounds(
    gradient: Sequence[float],
    standard_errors: Sequence[float],
    covariances: Mapping[Pair, float] | None = None,
    *,
    known: KnownCombination | None = None,
    upper_only: Sequence[bool] | None = None,
) -> StandardErrorBounds:
    """Smallest and largest standard error of c'b over all positive semidefinite correlation matrices.

    Parameters
    ----------
    gradient : (n,) c, any sign, n <= 12.
    standard_errors : (n,) of the coefficients, each > 0.
    covariances : those printed, by pair of positions (i, j), i != j, each pair once.
    known : another combination with a printed standard error, as an interval for its rounding.
    upper_only : (n,) true where the standard error is itself only an upper bound. With covariances or a known
        combination as well, the smallest standard error is then reported as zero, which surely holds.

    Returns
    -------
    The bounds, exact up to 1e-9 of the largest standard error; see :class:`StandardErrorBounds`. A single term, or
    terms with c = 0, leave nothing open.

    Raises
    ------
    InvalidInput
        For lengths that differ, too many terms, a standard error not above zero, a pair that does not exist.
    """
    n = len(gradient)
    if n == 0 or n > MOST_TERMS or len(standard_errors) != n:
        raise InvalidInput("gradient", f"must have between 1 and {MOST_TERMS} terms, one for each standard error")
    for i, error in enumerate(standard_errors):
        if not (math.isfinite(error) and error > 0):
            raise InvalidInput("standard_errors", "must be finite numbers above zero", i)
        if not math.isfinite(gradient[i]):
            raise InvalidInput("gradient", "must be finite", i)
    z = [c * s for c, s in zip(gradient, standard_errors, strict=True)]
    if not covariances and known is None:
        return _nothing_printed(z, upper_only)
    correlations = _correlations(covariances or {}, standard_errors)
    u: list[float] | None = None
    if known is not None:
        if len(known.gradient) != n:
            raise InvalidInput("known", "must have one element for each term")
        u = [c * s for c, s in zip(known.gradient, standard_errors, strict=True)]
    bounds = _with_print(z, correlations, u, known)
    if upper_only is not None and any(upper_only) and bounds.low > 0:
        return StandardErrorBounds(
            0.0,
            bounds.high,
            bounds.uncorrelated,
            bounds.method,
            bounds.shrinkage,
            bounds.known_combination_used,
            bounds.converged,
        )
    return bounds


def _nothing_printed(z: Sequence[float], upper_only: Sequence[bool] | None) -> StandardErrorBounds:
    sizes = [abs(each) for each in z]
    total = math.fsum(sizes)
    # A term known only from above can shrink to balance the others, so it never leaves a remainder itself.
    firm = sizes if upper_only is None else [s for s, open_ in zip(sizes, upper_only, strict=True) if not open_]
    low = max(0.0, 2 * max(firm, default=0.0) - total)
    return StandardErrorBounds(low, total, math.hypot(*sizes), "closed-form")


def _correlations(covariances: Mapping[Pair, float], standard_errors: Sequence[float]) -> dict[Pair, float]:
    n = len(standard_errors)
    found: dict[Pair, float] = {}
    for (i, j), value in covariances.items():
        pair = (min(i, j), max(i, j))
        if i == j or pair[0] < 0 or pair[1] >= n or pair in found or not math.isfinite(value):
            raise InvalidInput("covariances", f"({i}, {j}) is not a pair of two terms, given once, with a finite value")
        found[pair] = value / standard_errors[i] / standard_errors[j]
    return found


def _with_print(
    z: Sequence[float],
    correlations: dict[Pair, float],
    u: Sequence[float] | None,
    known: KnownCombination | None,
) -> StandardErrorBounds:
    n = len(z)
    unit = math.fsum(abs(each) for each in z)
    if unit == 0:
        return StandardErrorBounds(0.0, 0.0, 0.0, "closed-form")
    w = np.array(z) / unit
    shrinkage, centre = _possible_centre(n, correlations)
    fixed = {pair: shrinkage * value for pair, value in correlations.items()}
    matrix = _matrix(n, fixed)
    plain = float(w @ matrix @ w)
    open_pairs = [(i, j) for i in range(n) for j in range(i + 1, n) if (i, j) not in fixed]
    blocks = _blocks(n, fixed)

    window: tuple[float, float] | None = None
    v: FloatArray | None = None
    if u is not None and known is not None:
        v_unit = math.fsum(abs(each) for each in u)
        if v_unit > 0:
            v = np.array(u) / v_unit
            window = ((known.low / v_unit) ** 2, (known.high / v_unit) ** 2)

    method: Literal["closed-form", "one-open-covariance", "semidefinite"]
    used: bool | None = None
    converged = True
    in_blocks = blocks is not None and (v is None or not open_pairs)
    if in_blocks and blocks is not None:
        method = "closed-form"
        lengths = [math.sqrt(max(float(w[b] @ matrix[np.ix_(b, b)] @ w[b]), 0.0)) for b in blocks]
        total = math.fsum(lengths)
        low, high = max(0.0, 2 * max(lengths) - total), total
        if v is not None and window is not None:
            used = bool(window[0] * (1 - 1e-9) <= float(v @ matrix @ v) <= window[1] * (1 + 1e-9))
    elif len(open_pairs) == 1:
        method = "one-open-covariance"
        low, high, used = _one_open(w, matrix, open_pairs[0], v, window)
    else:
        method = "semidefinite"
        low, high, used, converged = _semidefinite(w, open_pairs, centre, v, window)
        if not converged:
            # Bounds that surely hold: those of the terms alone.
            sizes = [abs(each) for each in w.tolist()]
            low, high = max(0.0, 2 * max(sizes) - math.fsum(sizes)), math.fsum(sizes)
    uncorrelated = min(max(math.sqrt(max(plain, 0.0)), low), high)
    return StandardErrorBounds(low * unit, high * unit, uncorrelated * unit, method, shrinkage, used, converged)


def _matrix(n: int, entries: Mapping[Pair, float]) -> FloatArray:
    matrix = np.eye(n)
    for (i, j), value in entries.items():
        matrix[i, j] = matrix[j, i] = value
    return matrix


def _blocks(n: int, fixed: Mapping[Pair, float]) -> list[list[int]] | None:
    """The groups of terms linked by printed entries when every group is complete; ``None`` when one is not."""
    group = list(range(n))
    for i, j in fixed:
        a, b = group[i], group[j]
        group = [a if each == b else each for each in group]
    blocks = [[i for i in range(n) if group[i] == g] for g in dict.fromkeys(group)]
    if sum(len(b) * (len(b) - 1) // 2 for b in blocks) != len(fixed):
        return None
    return blocks


# --- one open entry --------------------------------------------------------------------------------------------


def _one_open(
    w: FloatArray, matrix: FloatArray, pair: Pair, v: FloatArray | None, window: tuple[float, float] | None
) -> tuple[float, float, bool | None]:
    """All entries printed but one: the interval it can take, cut to what the known combination allows."""
    i, j = pair
    rest = [k for k in range(len(w)) if k not in pair]
    middle, reach = 0.0, 1.0
    if rest:
        inner, a, b = matrix[np.ix_(rest, rest)], matrix[rest, i], matrix[rest, j]
        # lstsq: a printed block may be exactly singular, and a and b then lie in its range.
        to_a, to_b = np.linalg.lstsq(inner, a, rcond=1e-12)[0], np.linalg.lstsq(inner, b, rcond=1e-12)[0]
        middle = float(a @ to_b)
        reach = math.sqrt(max(0.0, 1.0 - float(a @ to_a)) * max(0.0, 1.0 - float(b @ to_b)))
    low, high = middle - reach, middle + reach
    closed = matrix.copy()
    closed[i, j] = closed[j, i] = 0.0
    used: bool | None = None
    if v is not None and window is not None:
        base, slope = float(v @ closed @ v), 2.0 * float(v[i] * v[j])
        slack = 1e-12
        if slope == 0:
            used = bool(window[0] - slack <= base <= window[1] + slack)
        else:
            ends = sorted(((window[0] - base) / slope, (window[1] - base) / slope))
            cut_low, cut_high = max(low, ends[0]), min(high, ends[1])
            used = bool(cut_low <= cut_high + slack / abs(slope))
            if used:
                low, high = min(cut_low, cut_high), max(cut_low, cut_high)
    base, slope = float(w @ closed @ w), 2.0 * float(w[i] * w[j])
    variances = sorted(max(base + slope * x, 0.0) for x in (low, high))
    return math.sqrt(variances[0]), math.sqrt(variances[1]), used


# --- several open entries --------------------------------------------------------------------------------------


def _possible_centre(n: int, correlations: dict[Pair, float]) -> tuple[float, FloatArray]:
    """The largest share (up to 1) of the printed correlations that some correlation matrix has, and such a matrix.

    The matrix is strictly positive definite with the printed entries times a hair less than that share where the
    share itself allows no such matrix.
    """
    if not correlations:
        return 1.0, np.eye(n)
    printed = _matrix(n, correlations) - np.eye(n)
    blocks = _blocks(n, correlations)
    if blocks is not None:
        lowest = min(float(np.linalg.eigvalsh(printed[np.ix_(b, b)])[0]) for b in blocks)
        # A block that is singular to rounding of the arithmetic is possible as printed.
        share = 1.0 if lowest >= -1.0 - 1e-12 else -1.0 / lowest
        return share, np.eye(n) + min(share, -(1.0 - 1e-9) / min(lowest, -1e-300)) * printed
    open_pairs = [(i, j) for i in range(n) for j in range(i + 1, n) if (i, j) not in correlations]
    basis = _basis(n, open_pairs)
    # Unknowns: the open entries and the share; the objective is the share, started from the identity (share 0). Printed
    # values far beyond one are brought to it first, so that the search knows no extremes.
    largest = max(1.0, float(np.abs(printed).max()))
    directions = np.concatenate([basis, printed[np.newaxis] / largest])
    path = _follow(np.eye(n), directions, _unit(len(open_pairs) + 1, -1), stop=largest)
    reached = float(path.position[-1]) / largest
    if reached > 1.0:
        # The identity and the point reached are both inside, and so is the point at share 1 between them.
        return 1.0, np.eye(n) + (path.matrix - np.eye(n)) / reached
    if reached + path.gap / largest > 1.0 - 1e-9:
        # Possible as printed, on the very edge: to the accuracy of the search.
        return 1.0, path.matrix
    return reached, path.matrix


def _unit(size: int, place: int) -> FloatArray:
    vector = np.zeros(size)
    vector[place] = 1.0
    return vector


def _basis(n: int, pairs: Sequence[Pair]) -> FloatArray:
    basis = np.zeros((len(pairs), n, n))
    for k, (i, j) in enumerate(pairs):
        basis[k, i, j] = basis[k, j, i] = 1.0
    return basis


@dataclass(frozen=True, slots=True)
class _PathEnd:
    matrix: FloatArray
    position: FloatArray
    gap: float


def _follow(start: FloatArray, basis: FloatArray, objective: FloatArray, *, stop: float | None = None) -> _PathEnd:
    """Maximise objective'y subject to start + sum y_k basis_k being positive semidefinite, from y = 0 inside.

    Follows the central path of t objective'y + log det. At its point for t the optimum is at most n/t higher;
    ``gap`` is that distance at the last point centred properly. With ``stop``, ends as soon as the objective
    exceeds it.
    """
    n = start.shape[0]
    y: FloatArray = np.zeros(len(basis))
    matrix = start.copy()
    scale = float(np.linalg.norm(objective))
    if len(basis) == 0 or scale == 0.0:
        return _PathEnd(matrix, y, 0.0)
    gap = math.inf
    t = 1.0 / scale
    best = _PathEnd(matrix, y, gap)
    while n / t > _TARGET_GAP / 4:
        centred = False
        for _ in range(60):
            factor = np.linalg.cholesky(matrix)
            left = np.linalg.solve(factor, basis)
            whitened = np.linalg.solve(factor, left.transpose(0, 2, 1)).reshape(len(basis), -1)
            gradient = t * objective + np.einsum("kii->k", whitened.reshape(len(basis), n, n))
            hessian = whitened @ whitened.T
            try:
                step = np.linalg.solve(hessian, gradient)
            except np.linalg.LinAlgError:
                break
            decrement = float(gradient @ step)
            if not math.isfinite(decrement) or decrement < 0:
                break
            if decrement < 1e-6:
                centred = True
                break
            # A damped Newton step of a self-concordant function stays inside.
            length = 1.0 / (1.0 + math.sqrt(decrement)) if decrement > 0.25 else 1.0
            moved = np.tensordot(step, basis, axes=1)
            for _ in range(40):
                trial = matrix + length * moved
                if _is_inside(trial):
                    break
                length /= 2
            else:
                break
            y = y + length * step
            matrix = start + np.tensordot(y, basis, axes=1)
            if not _is_inside(matrix):
                break
        if not centred:
            break
        gap = n / t
        best = _PathEnd(matrix, y, gap)
        if stop is not None and float(objective @ y) > stop:
            break
        t *= 6.0
    return best


def _is_inside(matrix: FloatArray) -> bool:
    try:
        np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        return False
    return True


def _semidefinite(
    w: FloatArray,
    open_pairs: Sequence[Pair],
    centre: FloatArray,
    v: FloatArray | None,
    window: tuple[float, float] | None,
) -> tuple[float, float, bool | None, bool]:
    """Smallest and largest root of w'Rw over the open entries; whether the known combination is used;
    convergence."""
    basis = _basis(len(w), open_pairs)
    used: bool | None = None
    extremes: tuple[_PathEnd, _PathEnd] | None = None
    if v is not None and window is not None:
        along_v = _quadratic(v, basis)
        extremes = (_follow(centre, basis, -along_v), _follow(centre, basis, along_v))
        smallest = float(v @ extremes[0].matrix @ v) - extremes[0].gap
        largest = float(v @ extremes[1].matrix @ v) + extremes[1].gap
        used = bool(window[0] <= largest and window[1] >= smallest)
    found = []
    for sign in (-1.0, 1.0):
        end = _follow(centre, basis, sign * _quadratic(w, basis))
        if used and extremes is not None and v is not None and window is not None:
            at = float(v @ end.matrix @ v)
            if not window[0] <= at <= window[1]:
                # The optimum is concave in u'Ru, so within the window it is at the end nearest to the free one.
                target = window[0] if at < window[0] else window[1]
                end = _at_known(w, basis, centre, v, target, extremes, sign)
        found.append(end)
    converged = all(end.gap <= _ACCEPTED_GAP for end in found)
    low = float(w @ found[0].matrix @ w) - found[0].gap
    high = float(w @ found[1].matrix @ w) + found[1].gap
    low = 0.0 if low < _NEGLIGIBLE else low
    return math.sqrt(low), math.sqrt(min(high, 1.0)), used, converged


def _quadratic(w: FloatArray, basis: FloatArray) -> FloatArray:
    """The derivatives of w'Rw with respect to the open entries."""
    derivatives: FloatArray = np.einsum("i,kij,j->k", w, basis, w)
    return derivatives


def _at_known(
    w: FloatArray,
    basis: FloatArray,
    centre: FloatArray,
    v: FloatArray,
    target: float,
    extremes: tuple[_PathEnd, _PathEnd],
    sign: float,
) -> _PathEnd:
    """The optimum among matrices with v'Rv = target, started from a mixture of the centre and an extreme."""
    at_centre = float(v @ centre @ v)
    other = extremes[1] if target > at_centre else extremes[0]
    at_other = float(v @ other.matrix @ v)
    share = 0.0 if at_other == at_centre else (target - at_centre) / (at_other - at_centre)
    # At the very edge of what is attainable nothing is inside; a hair away from it is.
    share = min(share, 1.0 - 1e-9)
    start = centre + share * (other.matrix - centre)
    direction = _quadratic(v, basis)
    size = float(np.linalg.norm(direction))
    if size == 0.0:
        return _follow(start, basis, sign * _quadratic(w, basis))
    # Directions that leave v'Rv as it is: the rows of V' orthogonal to its gradient.
    kept = np.linalg.svd(direction[np.newaxis, :])[2][1:]
    return _follow(start, np.tensordot(kept, basis, axes=1), sign * kept @ _quadratic(w, basis))
