"""Sums over estimates weighted by 1/(v + t), at any between-study variance t: the arithmetic under everything else.

With w_i = 1/(v_i + t), W = Σw, mean m = Σwy/W, h_i = w_i/W and P = diag(w) − ww'/W, one call gives

    W        total weight                            m       weighted mean
    y'Py     Σ w (y−m)²                              y'PPy   Σ w² (y−m)²
    y'PPPy   Σ w³(y−m)² − (Σ w²(y−m))²/W             Σ ln(v+t)
    tr P     Σ w (1−h)                               tr PP   Σ w² (1 − 2h + Σh²)
    Σ w²

The last five are what the likelihoods and their derivatives in t are made of.

Two ways to the same numbers. **Rows**: one pass over the data. **Power series**: for a trail the sums of every prefix
are wanted at a handful of values of t. Around an anchor a, with x = a + v_floor and u = x/(v + a),

    1/(v + t) = (u/x) Σ_j u^j s^j,   s = (a − t)/x,

so the running sums Σ u^(j+1) (y−c)^q (q = 0, 1, 2; j = 0 … 23) give W, Wm and Σwy² at every t of the anchor's cell by
one polynomial, and its derivatives give the sums with w² and w³. From one anchor to the next v_floor + a grows by √2,
the first is 0; hence |s| < 0.19, and 24 terms carry each single estimate to 1e-13 relative or better (the second
derivative; the others to 1e-15). At an anchor itself the first three sums are the answer. Adding an estimate costs the
same however many went before, so a whole trail is linear in its length. A cell
takes in the rows it has missed when it is asked for; cells nobody asks for cost nothing.

Two things keep the digits when weights differ by many orders of magnitude:

- the most precise estimate (the "top") is kept out of the sums and combined last: 1 − h of an estimate with nearly all
  the weight is then a quotient of known numbers, not 1 minus nearly 1;
- sums of squares are about a centre c near the weighted mean; when the mean has moved so far that y'Py would lose
  digits, the cell is summed afresh about the new mean.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numba.extending import overload

from .compiled import OPTIONS, kernel

TERMS = 24
"""Terms of each power series, a multiple of 4: 0.19^22 · 24²/2 is below 1e-13."""

CELLS_PER_DOUBLING = 2.0

INVERSE = 1.0 / np.arange(1.0, TERMS + 1.0)

ROWS = 0
TOP_ROW = 1
"""Places in `Series.state`: rows in the prefix, index of the most precise of them."""

ANCHOR = 0
WIDTH = 1
CENTRE = 2
LOG_SUM = 3
TAKEN_IN = 4
KEPT_OUT = 5
RECENTRED_AT = 6
P = 8
Q = P + TERMS
R = Q + TERMS
CELL_SIZE = R + TERMS
"""Places in a row of `Series.cells`: where the cell lies, its centre c, Σ ln(v+a); how many rows of the prefix it has
seen, which of them it keeps out as the top, how many there were when it was last summed afresh; Σ u^(j+1) (y−c)^q."""


class Rows(NamedTuple):
    """Plain rows: sums are passes over all of them.

    effects, variances : (n,) float64, scaled so that the smallest variance is between 1 and 4
    top : index of the most precise row
    """

    effects: np.ndarray
    variances: np.ndarray
    top: int


class Series(NamedTuple):
    """Running power series over the rows let in so far.

    Few and flat on purpose: a compiled call copies and counts references of every array of a tuple.

    effects, variances : (n,) float64, as above
    state : (2,) int64, see ROWS and TOP_ROW
    cells : (cells, CELL_SIZE) float64, see ANCHOR and the names after it
    floor : no row outside the top has a smaller variance
    """

    effects: np.ndarray
    variances: np.ndarray
    state: np.ndarray
    cells: np.ndarray
    floor: float


Source = Rows | Series


class Sums(NamedTuple):
    """The sums listed in the module docstring, at one t."""

    weight: float
    mean: float
    y_p_y: float
    y_pp_y: float
    y_ppp_y: float
    trace_p: float
    trace_pp: float
    weight_squares: float
    log_sum: float


@kernel
def rows_source(effects: np.ndarray, variances: np.ndarray) -> Rows:
    """Source over plain rows."""
    top = 0
    for i in range(1, effects.shape[0]):
        if variances[i] < variances[top]:
            top = i
    return Rows(effects, variances, top)


@kernel
def series_source(effects: np.ndarray, variances: np.ndarray, reach: float) -> Series:
    """Source over running power sums, empty at first; `reach` is the largest t that will be asked for."""
    smallest = np.inf
    second = np.inf
    for v in variances:
        if v < smallest:
            second = smallest
            smallest = v
        elif v < second:
            second = v
    # The prefix without its top row never holds the most precise row of all, so the second smallest variance is a
    # floor for the rows inside the sums; a single extremely precise study then costs no extra cells.
    floor = second if np.isfinite(second) else smallest
    count = 2 + int(np.ceil(CELLS_PER_DOUBLING * np.log2((reach + floor) / floor)))
    cells = np.zeros((count, CELL_SIZE))
    for cell in range(count):
        width = floor * 2.0 ** (cell / CELLS_PER_DOUBLING)
        cells[cell, WIDTH] = width
        cells[cell, ANCHOR] = width - floor
    state = np.empty(2, np.int64)
    state[ROWS] = 0
    state[TOP_ROW] = -1
    return Series(effects, variances, state, cells, floor)


@kernel
def _cell_of(source: Series, t: float) -> int:
    nearest: int = int(np.floor(CELLS_PER_DOUBLING * np.log2((t + source.floor) / source.floor) + 0.5))
    return int(min(source.cells.shape[0] - 1, max(0, nearest)))


@kernel
def add_row(source: Series, row: int) -> None:
    """Let the next row into a series source. Rows must come in order, 0, 1, 2 …"""
    source.state[ROWS] += 1
    top = source.state[TOP_ROW]
    if top < 0 or source.variances[row] < source.variances[top]:
        source.state[TOP_ROW] = row


@kernel
def _add_to_cell(cells: np.ndarray, cell: int, y: float, v: float) -> None:
    shifted = v + cells[cell, ANCHOR]
    e = y - cells[cell, CENTRE]
    cells[cell, LOG_SUM] += np.log(shifted)
    u = cells[cell, WIDTH] / shifted
    # Four powers at a time: the next four are u⁴ times these, so there is no long chain of dependent products.
    t0 = u
    t1 = u * u
    t2 = t1 * u
    t3 = t1 * t1
    u4 = t3
    ee = e * e
    for j in range(0, TERMS, 4):
        cells[cell, P + j] += t0
        cells[cell, P + j + 1] += t1
        cells[cell, P + j + 2] += t2
        cells[cell, P + j + 3] += t3
        cells[cell, Q + j] += t0 * e
        cells[cell, Q + j + 1] += t1 * e
        cells[cell, Q + j + 2] += t2 * e
        cells[cell, Q + j + 3] += t3 * e
        cells[cell, R + j] += t0 * ee
        cells[cell, R + j + 1] += t1 * ee
        cells[cell, R + j + 2] += t2 * ee
        cells[cell, R + j + 3] += t3 * ee
        t0 *= u4
        t1 *= u4
        t2 *= u4
        t3 *= u4


@kernel
def _sum_cell_afresh(source: Series, cell: int) -> None:
    """Sum the whole prefix about its own weighted mean at the anchor."""
    count = source.state[ROWS]
    top = source.state[TOP_ROW]
    cells = source.cells
    anchor = cells[cell, ANCHOR]
    origin = source.effects[top]
    weight = 0.0
    moment = 0.0
    for i in range(count):
        if i != top:
            w = 1.0 / (source.variances[i] + anchor)
            weight += w
            moment += w * (source.effects[i] - origin)
    for j in range(P, CELL_SIZE):
        cells[cell, j] = 0.0
    cells[cell, LOG_SUM] = 0.0
    cells[cell, CENTRE] = origin + moment / weight
    for i in range(count):
        if i != top:
            _add_to_cell(cells, cell, source.effects[i], source.variances[i])
    cells[cell, RECENTRED_AT] = count
    cells[cell, TAKEN_IN] = count
    cells[cell, KEPT_OUT] = top


@kernel
def _catch_up(source: Series, cell: int) -> None:
    """Bring a cell to the whole prefix (of at least two rows) without its top row."""
    count = source.state[ROWS]
    top = source.state[TOP_ROW]
    cells = source.cells
    if cells[cell, RECENTRED_AT] == 0.0:
        _sum_cell_afresh(source, cell)
        return
    kept_out = int(cells[cell, KEPT_OUT])
    if kept_out != top:
        # The new top is among the rows not yet taken in; the old one now belongs to the rest.
        _add_to_cell(cells, cell, source.effects[kept_out], source.variances[kept_out])
        cells[cell, KEPT_OUT] = top
    for i in range(int(cells[cell, TAKEN_IN]), count):
        if i != top:
            _add_to_cell(cells, cell, source.effects[i], source.variances[i])
    cells[cell, TAKEN_IN] = count
    weight = cells[cell, P]
    drift = cells[cell, Q] / weight
    lost = weight * drift * drift
    kept = cells[cell, R] - lost
    if lost > 16.0 * kept:
        # A drift of the size of rounding is no drift (a prefix of equal values), and summing afresh at every row would
        # undo the running sums: it waits until it is worth it, or urgent.
        real = abs(drift) > 1e-13 * (abs(cells[cell, CENTRE]) + abs(drift))
        if real and (count >= 1.25 * cells[cell, RECENTRED_AT] or lost > 1e4 * kept):
            _sum_cell_afresh(source, cell)


@kernel
def _combine(
    top_weight: float,
    top_effect: float,
    centre: float,
    a0: float,
    a1: float,
    a2: float,
    b0: float,
    b1: float,
    b2: float,
    c0: float,
    c1: float,
    c2: float,
    log_sum: float,
) -> Sums:
    """Join the top row to sums over the rest: a_q = Σw(y−c)^q, b_q = Σw²(y−c)^q, c_q = Σw³(y−c)^q."""
    weight = top_weight + a0
    top_share = top_weight / weight
    rest_share = a0 / weight
    rest_mean = centre + a1 / a0
    distance = top_effect - rest_mean
    mean = rest_mean + top_share * distance
    top_residual = rest_share * distance
    y_p_y = max(0.0, a2 - a1 * a1 / a0) + top_weight * rest_share * distance * distance
    e = mean - centre
    top_z = top_weight * top_residual
    rest_zz = max(0.0, b2 - 2.0 * e * b1 + e * e * b0)
    y_pp_y = rest_zz + top_z * top_z
    rest_wz = b1 - e * b0
    rest_wzz = max(0.0, c2 - 2.0 * e * c1 + e * e * c0)
    off_centre = rest_wz - top_z * a0
    y_ppp_y = max(0.0, rest_wzz - 2.0 * top_z * rest_wz + top_z * top_z * a0 - off_centre * off_centre / weight)
    rest_shares_squared = b0 / (weight * weight)
    trace_p = a0 - b0 / weight + top_weight * rest_share
    trace_pp = (
        b0
        - 2.0 * c0 / weight
        + b0 * (top_share * top_share + rest_shares_squared)
        + top_weight * top_weight * (rest_share * rest_share + rest_shares_squared)
    )
    return Sums(weight, mean, y_p_y, y_pp_y, y_ppp_y, trace_p, trace_pp, b0 + top_weight * top_weight, log_sum)


@kernel
def _rows_sums(source: Rows, t: float) -> Sums:
    y = source.effects
    v = source.variances
    count = y.shape[0]
    top = source.top
    top_weight = 1.0 / (v[top] + t)
    origin = y[top]
    a0 = 0.0
    a1 = 0.0
    for i in range(count):
        if i != top:
            w = 1.0 / (v[i] + t)
            a0 += w
            a1 += w * (y[i] - origin)
    centre = origin + a1 / a0
    a1 = 0.0
    a2 = 0.0
    for i in range(count):
        if i != top:
            w = 1.0 / (v[i] + t)
            d = y[i] - centre
            a1 += w * d
            a2 += w * d * d
    b0 = 0.0
    b1 = 0.0
    b2 = 0.0
    c0 = 0.0
    c1 = 0.0
    c2 = 0.0
    log_sum = np.log(v[top] + t)
    product = 1.0
    for i in range(count):
        if i != top:
            total = v[i] + t
            w = 1.0 / total
            ww = w * w
            www = ww * w
            d = y[i] - centre
            b0 += ww
            b1 += ww * d
            b2 += ww * d * d
            c0 += www
            c1 += www * d
            c2 += www * d * d
            # One logarithm for many rows: the totals are 1 or more, and the product is emptied before it overflows.
            if total > 1e100:
                log_sum += np.log(total)
            else:
                product *= total
                if product > 1e150:
                    log_sum += np.log(product)
                    product = 1.0
    log_sum += np.log(product)
    return _combine(top_weight, origin, centre, a0, a1, a2, b0, b1, b2, c0, c1, c2, log_sum)


@kernel
def _series_sums(source: Series, t: float) -> Sums:
    top = source.state[TOP_ROW]
    top_total = source.variances[top] + t
    cells = source.cells
    cell = _cell_of(source, t)
    if cells[cell, TAKEN_IN] != source.state[ROWS]:
        _catch_up(source, cell)
    x = cells[cell, WIDTH]
    xx = x * x
    xxx = xx * x
    s = (cells[cell, ANCHOR] - t) / x
    if s == 0.0:
        return _combine(
            1.0 / top_total,
            source.effects[top],
            cells[cell, CENTRE],
            cells[cell, P] / x,
            cells[cell, Q] / x,
            cells[cell, R] / x,
            cells[cell, P + 1] / xx,
            cells[cell, Q + 1] / xx,
            cells[cell, R + 1] / xx,
            cells[cell, P + 2] / xxx,
            cells[cell, Q + 2] / xxx,
            cells[cell, R + 2] / xxx,
            cells[cell, LOG_SUM] + np.log(top_total),
        )
    p0 = 0.0
    p1 = 0.0
    p2 = 0.0
    q0 = 0.0
    q1 = 0.0
    q2 = 0.0
    r0 = 0.0
    r1 = 0.0
    r2 = 0.0
    logs = 0.0
    for j in range(TERMS - 1, -1, -1):
        p2 = p2 * s + p1
        p1 = p1 * s + p0
        p0 = p0 * s + cells[cell, P + j]
        q2 = q2 * s + q1
        q1 = q1 * s + q0
        q0 = q0 * s + cells[cell, Q + j]
        r2 = r2 * s + r1
        r1 = r1 * s + r0
        r0 = r0 * s + cells[cell, R + j]
        logs = logs * s + cells[cell, P + j] * INVERSE[j]
    return _combine(
        1.0 / top_total,
        source.effects[top],
        cells[cell, CENTRE],
        p0 / x,
        q0 / x,
        r0 / x,
        p1 / xx,
        q1 / xx,
        r1 / xx,
        p2 / xxx,
        q2 / xxx,
        r2 / xxx,
        cells[cell, LOG_SUM] - s * logs + np.log(top_total),
    )


@kernel
def _series_place(source: Series, t: float) -> float:
    return float(source.cells[_cell_of(source, t), ANCHOR])


def sums_at(source: Source, t: float) -> Sums:
    """The sums at between-study variance t ≥ 0, for at least two rows."""
    return _rows_sums(source, t) if isinstance(source, Rows) else _series_sums(source, t)


def cheap_place(source: Source, t: float) -> float:
    """A value of t near the one given at which sums cost least: t itself for rows, the nearest anchor for series."""
    return t if isinstance(source, Rows) else _series_place(source, t)


# In compiled code the choice between the two kinds of source is made by the compiler, from the type of the argument.


@overload(sums_at, jit_options=OPTIONS, strict=False)  # strict would compare the annotations
def _compiled_sums_at(source: Any, t: Any) -> Callable[[Any, Any], Any]:
    if source.instance_class is Rows:
        return lambda source, t: _rows_sums(source, t)
    return lambda source, t: _series_sums(source, t)


@overload(cheap_place, jit_options=OPTIONS, strict=False)  # strict would compare the annotations
def _compiled_cheap_place(source: Any, t: Any) -> Callable[[Any, Any], Any]:
    if source.instance_class is Rows:
        return lambda source, t: t
    return lambda source, t: _series_place(source, t)
