"""Estimators of the between-study variance τ² (compiled), each working on any source of weighted sums.

The estimators and their defining equations (k estimates, w₀ = 1/v, w = 1/(v + τ²), all truncated at 0):

    dersimonian-laird               (Q − (k−1)) / tr P(0)                   DerSimonian & Laird 1986
    hedges-olkin                    s²(y) − mean(v)                         Hedges 1983; Hedges & Olkin 1985
    hunter-schmidt                  (Q − k) / Σw₀                           Hunter & Schmidt 1990
    sidik-jonkman                   τ₀² Σ(y−m)²/(v+τ₀²) / (k−1), τ₀² = Σ(y−ȳ)²/k,    Sidik & Jonkman 2005
                                    which is 0 where the formula divides 0 by 0 (all estimates equal)
    paule-mandel, empirical-bayes   root of Σw(y−m)² = k−1                  Paule & Mandel 1982; Morris 1983
    maximum-likelihood              global maximum of the likelihood
    restricted-maximum-likelihood   global maximum of the restricted likelihood

**Every one of them lies between 0 and R² = (max y − min y)².** For the moment estimators each is a ratio of pairwise
sums of (y_i−y_j)² and of the same weights. For the likelihoods: w²r² − w(1−h) has the sign of
(1−h)(y − mean of the others)² − (v+t), so at t ≥ R² − min v no term of the score is positive.

**The likelihood search is a proof, not a hope.** The (restricted) log likelihood can have several local maxima. With
G = y'PPy and H = tr P (for maximum likelihood H = Σw) its slope is (G − H)/2 and its curvature (D − E)/2 with
D = tr PP (Σw²) and E = 2y'PPPy. In the eigenbasis of the contrasts each is a sum of terms 1/(λ+t)^p with λ ≥ c, c the
smallest variance: p = 1 for H, 2 for G and D, 3 for E. So G, H, D, E fall as t grows, while (t+c)H, (t+c)²G, (t+c)²D
and (t+c)³E rise. With α = a + c and β = b + c the values at the ends of an interval [a, b] therefore decide:

    rising    G(b) > H(a)   or  G(a)G(b) > ρ²H(b)²          no maximum inside
    falling   G(a) < H(b)   or  ρ²G(a)G(b) < H(a)²          no maximum inside
    concave   D(a) < E(b)   or  ρ⁶D(b)³ < E(a)²E(b)         at most one maximum, found by bracketed Newton steps
    convex    D(b) > E(a)   or  D(a)³ > ρ⁶E(a)E(b)²         no maximum inside

where ρ = β/α. (Rising: G is at least max(G(b), α²G(a)/(t+c)²) and H at most min(H(a), βH(b)/(t+c)); their ratio is
least where the two bounds of G meet. The others likewise.) Rising and falling also follow from the slope at one end,
when it is larger than the curvature, which lies between (D(b) − E(a))/2 and (D(a) − E(b))/2, could undo over b − a.

Beyond a the likelihood falls for good if G(a) < H(a) and G(a)Σ(y−ȳ)² < α²H(a)², the second falling test with b at
infinity, because (t+c)²G rises to Σ(y−ȳ)². And since Σln(v+t), y'Py and W are monotone too, the logarithms of a with
the other terms of b bound the likelihood from above on [a, b]. Intervals that none of this settles are halved. When all
are settled, every local maximum within `LOG_LIKELIHOOD_MARGIN` of the best one is known; the best is returned, exactly
0 if it is the boundary. A hint (the answer for the prefix before) only chooses where to cut first: it saves work and
cannot change the answer.
"""

from __future__ import annotations

import numpy as np

from .compiled import kernel
from .weighted_sums import Source, Sums, cheap_place, sums_at

DERSIMONIAN_LAIRD = 0
HEDGES_OLKIN = 1
HUNTER_SCHMIDT = 2
SIDIK_JONKMAN = 3
PAULE_MANDEL = 4
MAXIMUM_LIKELIHOOD = 5
RESTRICTED_MAXIMUM_LIKELIHOOD = 6

ESTIMATORS = {
    "dersimonian-laird": DERSIMONIAN_LAIRD,
    "hedges-olkin": HEDGES_OLKIN,
    "hunter-schmidt": HUNTER_SCHMIDT,
    "sidik-jonkman": SIDIK_JONKMAN,
    "paule-mandel": PAULE_MANDEL,
    "empirical-bayes": PAULE_MANDEL,
    "maximum-likelihood": MAXIMUM_LIKELIHOOD,
    "restricted-maximum-likelihood": RESTRICTED_MAXIMUM_LIKELIHOOD,
}
"""Published name -> code of the compiled estimator. Morris' empirical Bayes solves Paule and Mandel's equation."""

LOG_LIKELIHOOD_MARGIN = 2.0
"""A second local maximum within this many log-likelihood units of the best is reported."""

T = 0
G = 1
H = 2
D = 3
E = 4
LOGS = 5
REST = 6
"""Columns of the workspace: a place t, G, H, D, E there, and the two parts of the log likelihood."""

HINT_BELOW = 0.5
HINT_ABOVE = 1.5
OUTWARD = 2.0
"""Where the search cuts first, as multiples of the hint, and how it goes up from there. They cost or save time only."""

MOST_STEPS = 200
LAST_STEP = 1e-7
"""Relative size of a Newton step after which no other is taken: the step is taken, and the error left is its square."""


@kernel
def log_likelihood(sums: Sums, restricted: bool) -> float:
    """Log likelihood with the mean maximised out, without the 2π constant and, restricted, without ½ln|X'X|."""
    value = -0.5 * (sums.log_sum + sums.y_p_y)
    if restricted:
        value -= 0.5 * np.log(sums.weight)
    return value


@kernel
def _falling_parts(sums: Sums, restricted: bool) -> tuple[float, float, float, float]:
    """G, H, D, E of the module docstring."""
    if restricted:
        return sums.y_pp_y, sums.trace_p, sums.trace_pp, 2.0 * sums.y_ppp_y
    return sums.y_pp_y, sums.weight, sums.weight_squares, 2.0 * sums.y_ppp_y


@kernel
def paule_mandel(source: Source, k: int, q: float, reach: float, hint: float) -> tuple[float, bool, int]:
    """Root of y'Py = k − 1, or 0 if y'Py is already no larger at 0. Returns (τ², converged, evaluations).

    `q` is y'Py at 0; y'Py falls as τ² grows, so there is one root, below `reach`. `hint` is a guess or 0.
    """
    target = k - 1.0
    if q <= target:
        return 0.0, True, 0
    low = 0.0
    high = reach
    t = hint if hint < reach else 0.0
    sums = sums_at(source, t)
    if sums.y_p_y < target:
        high = t
    for step in range(MOST_STEPS):
        # Newton's step on 1/y'Py, which is nearly linear in t where t is large against v.
        step_to = t + (sums.y_p_y / target - 1.0) * sums.y_p_y / sums.y_pp_y
        if low < step_to < high:
            if abs(step_to - t) <= LAST_STEP * step_to:
                return step_to, True, step + 1
        else:
            step_to = low + 0.5 * (high - low)
            if not low < step_to < high:
                return step_to, True, step + 1
        t = step_to
        sums = sums_at(source, t)
        if sums.y_p_y > target:
            low = t
        elif sums.y_p_y < target:
            high = t
        else:
            return t, True, step + 2
    return t, False, MOST_STEPS


@kernel
def _root_of_slope(source: Source, restricted: bool, low: float, high: float, start: float) -> tuple[float, bool, int]:
    """Zero of the slope in an interval on which the likelihood is concave, rising at `low`, falling at `high`."""
    t = start
    for step in range(MOST_STEPS):
        g, h, d, e = _falling_parts(sums_at(source, t), restricted)
        if g > h:
            low = t
        elif g < h:
            high = t
        else:
            return t, True, step + 1
        curvature = d - e
        step_to = t - (g - h) / curvature if curvature < 0.0 else low
        if low < step_to < high:
            if abs(step_to - t) <= LAST_STEP * step_to:
                return step_to, True, step + 1
        else:
            step_to = low + 0.5 * (high - low)
            if not low < step_to < high:
                return step_to, True, step + 1
        t = step_to
    return t, False, MOST_STEPS


@kernel
def _measure(source: Source, restricted: bool, t: float, work: np.ndarray, row: int) -> float:
    """Write t and what the tests need of the sums at t into a row of the workspace; returns the log likelihood."""
    sums = sums_at(source, t)
    g, h, d, e = _falling_parts(sums, restricted)
    rest = sums.y_p_y
    if restricted:
        rest += np.log(sums.weight)
    work[row, T] = t
    work[row, G] = g
    work[row, H] = h
    work[row, D] = d
    work[row, E] = e
    work[row, LOGS] = -0.5 * sums.log_sum
    work[row, REST] = -0.5 * rest
    return -0.5 * (sums.log_sum + rest)


@kernel
def workspace() -> np.ndarray:
    """Room for :func:`likelihood_maximum`; one serves any number of calls.

    A row for each place measured that still bounds an unsettled interval. Going up takes at most 500 rows over the
    widest range of data accepted; halving is depth first and stops at intervals narrower than 1e-11, which takes some
    50 more.
    """
    return np.empty((700, 7))


@kernel
def likelihood_maximum(
    source: Source, restricted: bool, smallest: float, reach: float, total_squares: float, hint: float, work: np.ndarray
) -> tuple[float, bool, int, int]:
    """Global maximum over t ≥ 0 of the (restricted) likelihood: (τ², converged, evaluations, maxima near the best).

    `smallest` is the smallest variance of the prefix, `reach` the bound R² and `total_squares` the Σ(y−ȳ)² of the
    module docstring, `hint` a guess or 0.
    """
    top = reach - smallest
    if not top > 0.0:
        return 0.0, True, 0, 1
    # The list of places: row `last` holds the left end of the interval treated next, the row before it the right end.
    # It is filled from 0 upwards and then turned round.
    best = _measure(source, restricted, 0.0, work, 0)
    evaluations = 1
    last = 0
    # Cut on both sides of the hint: then the middle piece has the maximum and is concave, as a rule. Without a hint,
    # and beyond it, go up until the likelihood falls for good.
    place = cheap_place(source, HINT_BELOW * hint)
    while True:
        t = work[last, T]
        g = work[last, G]
        h = work[last, H]
        alpha_h = (t + smallest) * h
        if t >= top or (t >= hint and g < h and total_squares / alpha_h * (g / alpha_h) < 1.0):
            break
        if not t < place:
            place = cheap_place(source, HINT_ABOVE * hint)
        if not t < place:
            place = cheap_place(source, OUTWARD * (t + smallest) - smallest)
        if not t < place < top:
            place = top
        last += 1
        best = max(best, _measure(source, restricted, place, work, last))
        evaluations += 1
    for i in range((last + 1) // 2):
        for j in range(7):
            work[i, j], work[last - i, j] = work[last - i, j], work[i, j]
    n_found = 0
    found = work[640:, T]
    if work[last, G] <= work[last, H]:
        n_found = 1
        found[0] = 0.0
    converged = True
    while last > 0:
        a = work[last, T]
        ga = work[last, G]
        ha = work[last, H]
        da = work[last, D]
        ea = work[last, E]
        b = work[last - 1, T]
        gb = work[last - 1, G]
        hb = work[last - 1, H]
        db = work[last - 1, D]
        eb = work[last - 1, E]
        ratio = (b + smallest) / (a + smallest)
        ratio2 = ratio * ratio
        most_gain = (b - a) * max(0.0, da - eb)
        most_loss = (b - a) * max(0.0, ea - db)
        if (
            gb > ha
            or (ga / hb) * (gb / hb) > ratio2
            or gb - hb > most_gain
            or ga - ha > most_loss
            or ga < hb
            or ratio2 * (ga / ha) * (gb / ha) < 1.0
            or ha - ga > most_gain
            or hb - gb > most_loss
        ):
            last -= 1
            continue
        # Quotients, not products of powers: those would leave the range of floating point first.
        ceiling = work[last, LOGS] + work[last - 1, REST]
        if ceiling < best - LOG_LIKELIHOOD_MARGIN or db > ea or (da / ea) * (da / eb / ratio2) ** 2 > ratio2:
            last -= 1
            continue
        concave = da < eb or (ratio2 * db / ea) ** 3 * (ea / eb) < 1.0
        if not concave and b - a > 1e-11 * (b + smallest):
            middle = cheap_place(source, np.sqrt((a + smallest) * (b + smallest)) - smallest)
            if not a < middle < b:
                middle = 0.5 * (a + b)
            if last + 1 >= 640:
                converged = False
                break
            work[last + 1, :] = work[last, :]
            best = max(best, _measure(source, restricted, middle, work, last))
            evaluations += 1
            last += 1
            continue
        last -= 1
        if ga > ha and gb <= hb:
            candidate = 0.5 * (a + b)  # where it is not concave, too narrow to matter
            if concave:
                start = hint if a < hint < b else (b if a == 0.0 else np.sqrt(a * b))
                candidate, found_root, steps = _root_of_slope(source, restricted, a, b, start)
                evaluations += steps
                converged = converged and found_root
            if n_found == 50:
                converged = False
                break
            found[n_found] = candidate
            n_found += 1
    if n_found == 0:
        # Only rounding can bring us here: the slope at 0 was positive and no interval showed its change of sign.
        return 0.0, False, evaluations, 0
    winner = found[0]
    near = 1
    if n_found > 1:
        # Places come in rising order, so of two equally high maxima the smaller stands.
        highest = -np.inf
        for i in range(n_found):
            value = log_likelihood(sums_at(source, found[i]), restricted)
            evaluations += 1
            work[i, LOGS] = value
            if value > highest:
                highest = value
                winner = found[i]
        near = 0
        for i in range(n_found):
            if work[i, LOGS] >= highest - LOG_LIKELIHOOD_MARGIN:
                near += 1
    return winner, converged, evaluations, near


@kernel
def between_study_variance(
    source: Source,
    estimator: int,
    k: int,
    q: float,
    weight: float,
    trace_p: float,
    sample_variance: float,
    mean_variance: float,
    smallest: float,
    reach: float,
    hint: float,
    work: np.ndarray,
) -> tuple[float, float, bool, int, int]:
    """τ² by the estimator of that code, for k ≥ 2: (τ², untruncated τ², converged, evaluations, maxima near the best).

    q, weight, trace_p are y'Py, W and tr P at t = 0; sample_variance is Σ(y−ȳ)²/(k−1). For estimators that are not
    a truncated formula the second value repeats the first.
    """
    if estimator == DERSIMONIAN_LAIRD:
        raw = (q - (k - 1.0)) / trace_p
        return max(0.0, raw), raw, True, 0, 1
    if estimator == HEDGES_OLKIN:
        raw = sample_variance - mean_variance
        return max(0.0, raw), raw, True, 0, 1
    if estimator == HUNTER_SCHMIDT:
        raw = (q - k) / weight
        return max(0.0, raw), raw, True, 0, 1
    if estimator == SIDIK_JONKMAN:
        start = sample_variance * (k - 1.0) / k
        if start <= 0.0:
            return 0.0, 0.0, True, 0, 1
        t = start * sums_at(source, start).y_p_y / (k - 1.0)
        return t, t, True, 1, 1
    if estimator == PAULE_MANDEL:
        t, converged, steps = paule_mandel(source, k, q, reach, hint)
        return t, t, converged, steps, 1
    restricted = estimator == RESTRICTED_MAXIMUM_LIKELIHOOD
    t, converged, steps, near = likelihood_maximum(
        source, restricted, smallest, reach, sample_variance * (k - 1.0), hint, work
    )
    return t, t, converged, steps, near
