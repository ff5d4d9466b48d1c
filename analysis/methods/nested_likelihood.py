"""The likelihood of estimates nested in papers nested in data sets (compiled), linear in the number of estimates.

y = Xb + set effect + paper effect + estimate effect + sampling error, with variances θ₂, θ₁, θ₀ and known v. With
w = 1/(v+θ₀), the inverse of the covariance of everything is never formed. For a paper j with s = Σw the quadratic form
of a vector u is Σw(u−ū)² + a ū², a = s c, c = 1/(1+θ₁s); for a data set with A = Σa over its papers it is
Σa(ū_j−ū)² + A e ū², e = 1/(1+θ₂A) (the block inverses of Sherman & Morrison 1950, twice, written with means so
that nothing is the small difference of large numbers). Hence

    (Σ⁻¹u)_i = w_i[(u_i − ū_j) + c_j((ū_j − ū_d) + e_d ū_d)]       ln|Σ| = Σln(v+θ₀) − Σln c − Σln e

The slope in θ_l is ½(y'PZZ'Py − tr PZZ'), the expected information ½tr(PZZ'PZZ'), and y'PZZ'PZZ'Py/2 is the average of
the expected and the observed information (Gilmour, Thompson & Cullis 1995), so the observed one comes for free: Newton
steps need nothing else. Without a data-set level θ₂ stays 0 and every paper is its own set.
"""

from __future__ import annotations

import numpy as np

from .compiled import kernel

COMPONENTS = 3
MOST_STEPS = 100


@kernel
def _solve(
    u: np.ndarray,
    w: np.ndarray,
    s: np.ndarray,
    c: np.ndarray,
    big_a: np.ndarray,
    e: np.ndarray,
    papers: np.ndarray,
    sets: np.ndarray,
) -> np.ndarray:
    """Σ⁻¹u for the columns of u (n × q)."""
    n, q = u.shape
    m = s.shape[0]
    means = np.zeros((m, q))
    for i in range(n):
        for k in range(q):
            means[papers[i], k] += w[i] * u[i, k]
    set_means = np.zeros((big_a.shape[0], q))
    for j in range(m):
        for k in range(q):
            if s[j] > 0.0:
                means[j, k] /= s[j]
                set_means[sets[j], k] += s[j] * c[j] * means[j, k]
    for d in range(big_a.shape[0]):
        for k in range(q):
            if big_a[d] > 0.0:
                set_means[d, k] /= big_a[d]
    result = np.empty((n, q))
    for i in range(n):
        j = papers[i]
        d = sets[j]
        for k in range(q):
            result[i, k] = w[i] * (
                (u[i, k] - means[j, k]) + c[j] * ((means[j, k] - set_means[d, k]) + e[d] * set_means[d, k])
            )
    return result


@kernel
def _spread(rows: np.ndarray, papers: np.ndarray, sets: np.ndarray, level: int, m: int, n_sets: int) -> np.ndarray:
    """ZZ' rows for the level: the rows themselves, or their sums over paper or data set given back to every row."""
    if level == 0:
        return rows
    n, q = rows.shape
    groups = m if level == 1 else n_sets
    sums = np.zeros((groups, q))
    for i in range(n):
        g = papers[i] if level == 1 else sets[papers[i]]
        for k in range(q):
            sums[g, k] += rows[i, k]
    result = np.empty((n, q))
    for i in range(n):
        g = papers[i] if level == 1 else sets[papers[i]]
        for k in range(q):
            result[i, k] = sums[g, k]
    return result


@kernel
def _weights(
    theta: np.ndarray, v: np.ndarray, papers: np.ndarray, sets: np.ndarray, m: int, n_sets: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray, float]:
    """w, s, c, A, e of the module docstring, and ln|Σ|."""
    n = v.shape[0]
    w = np.empty(n)
    s = np.zeros(m)
    log_det = 0.0
    product = 1.0
    for i in range(n):
        total = v[i] + theta[0]
        w[i] = 1.0 / total
        s[papers[i]] += w[i]
        # Scaled variances are 1 or more: one logarithm serves many rows.
        if total > 1e100:
            log_det += np.log(total)
        else:
            product *= total
            if product > 1e150:
                log_det += np.log(product)
                product = 1.0
    log_det += np.log(product)
    c = np.empty(m)
    big_a = np.zeros(n_sets)
    for j in range(m):
        c[j] = 1.0 / (1.0 + theta[1] * s[j])
        big_a[sets[j]] += s[j] * c[j]
        log_det -= np.log(c[j])
    e = np.empty(n_sets)
    for d in range(n_sets):
        e[d] = 1.0 / (1.0 + theta[2] * big_a[d])
        log_det -= np.log(e[d])
    return w, s, c, big_a, e, log_det


@kernel
def nested_fit(
    theta: np.ndarray,
    y: np.ndarray,
    v: np.ndarray,
    x: np.ndarray,
    papers: np.ndarray,
    sets: np.ndarray,
    m: int,
    n_sets: int,
    restricted: bool,
) -> tuple[float, np.ndarray, np.ndarray]:
    """Log likelihood without the 2π constant (restricted: without ½ln|X'X| too), coefficients, X'Σ⁻¹X."""
    w, s, c, big_a, e, log_det = _weights(theta, v, papers, sets, m, n_sets)
    sx = _solve(x, w, s, c, big_a, e, papers, sets)
    information = x.T @ sx
    beta = np.linalg.solve(information, sx.T @ y)
    residual = y - x @ beta
    # The quadratic form from deviations, all of one sign; residual @ Σ⁻¹residual would cancel.
    means = np.zeros(m)
    for i in range(y.shape[0]):
        means[papers[i]] += w[i] * residual[i]
    set_means = np.zeros(n_sets)
    for j in range(m):
        if s[j] > 0.0:
            means[j] /= s[j]
            set_means[sets[j]] += s[j] * c[j] * means[j]
    for d in range(n_sets):
        if big_a[d] > 0.0:
            set_means[d] /= big_a[d]
    form = 0.0
    for i in range(y.shape[0]):
        deviation = residual[i] - means[papers[i]]
        form += w[i] * deviation * deviation
    for j in range(m):
        deviation = means[j] - set_means[sets[j]]
        form += s[j] * c[j] * deviation * deviation
    for d in range(n_sets):
        form += big_a[d] * e[d] * set_means[d] * set_means[d]
    value = -0.5 * (log_det + form)
    if restricted:
        value -= 0.5 * np.linalg.slogdet(information)[1]
    return value, beta, information


@kernel
def nested_slopes(
    theta: np.ndarray,
    y: np.ndarray,
    v: np.ndarray,
    x: np.ndarray,
    papers: np.ndarray,
    sets: np.ndarray,
    m: int,
    n_sets: int,
    restricted: bool,
    beta: np.ndarray,
    information: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Slope (3,), expected information (3, 3) and observed information (3, 3) in the variances θ."""
    n = y.shape[0]
    w, s, c, big_a, e, _ = _weights(theta, v, papers, sets, m, n_sets)
    sx = _solve(x, w, s, c, big_a, e, papers, sets)
    cov = np.linalg.inv(information)
    residual = np.empty((n, 1))
    residual[:, 0] = y - x @ beta
    py = _solve(residual, w, s, c, big_a, e, papers, sets)
    w2 = np.zeros(m)
    w3 = np.zeros(m)
    for i in range(n):
        w2[papers[i]] += w[i] * w[i]
        w3[papers[i]] += w[i] * w[i] * w[i]
    trace = np.zeros(COMPONENTS)
    # Squared Frobenius norms of Z_k'Σ⁻¹Z_l, block by block; f = θ₁c and h = θ₂e are the rank-one corrections.
    norm = np.zeros((COMPONENTS, COMPONENTS))
    set_g2 = np.zeros(n_sets)
    set_gsg = np.zeros(n_sets)
    set_ag2 = np.zeros(n_sets)
    set_a2 = np.zeros(n_sets)
    set_a3 = np.zeros(n_sets)
    for j in range(m):
        d = sets[j]
        f = theta[1] * c[j]
        a = s[j] * c[j]
        g2 = c[j] * c[j] * w2[j]
        h = theta[2] * e[d]
        trace[0] += s[j] - f * w2[j] - h * g2
        trace[1] += a - h * a * a
        norm[0, 0] += w2[j] - 2.0 * f * w3[j] + f * f * w2[j] * w2[j]
        norm[0, 1] += g2 - 2.0 * h * a * g2
        norm[1, 1] += a * a - 2.0 * h * a * a * a
        set_g2[d] += g2
        set_gsg[d] += c[j] * c[j] * (w3[j] - f * w2[j] * w2[j])
        set_ag2[d] += a * a
        set_a2[d] += a * a
        set_a3[d] += a * a * a
    for d in range(n_sets):
        h = theta[2] * e[d]
        trace[2] += big_a[d] * e[d]
        norm[0, 0] += -2.0 * h * set_gsg[d] + h * h * set_g2[d] * set_g2[d]
        norm[0, 1] += h * h * set_a2[d] * set_g2[d]
        norm[1, 1] += h * h * set_a2[d] * set_a2[d]
        norm[0, 2] += e[d] * e[d] * set_g2[d]
        norm[1, 2] += e[d] * e[d] * set_a2[d]
        norm[2, 2] += (big_a[d] * e[d]) ** 2
    slope = np.empty(COMPONENTS)
    expected = np.empty((COMPONENTS, COMPONENTS))
    average = np.empty((COMPONENTS, COMPONENTS))
    spread_x = [_spread(sx, papers, sets, level, m, n_sets) for level in range(COMPONENTS)]
    spread_r = [_spread(py, papers, sets, level, m, n_sets) for level in range(COMPONENTS)]
    solved_r = [_solve(spread_r[level], w, s, c, big_a, e, papers, sets) for level in range(COMPONENTS)]
    products = [sx.T @ spread_x[level] for level in range(COMPONENTS)]
    for k in range(COMPONENTS):
        quadratic = 0.0
        for i in range(n):
            quadratic += py[i, 0] * spread_r[k][i, 0]
        t = trace[k]
        if restricted:
            t -= np.trace(cov @ products[k])
        slope[k] = 0.5 * (quadratic - t)
    for k in range(COMPONENTS):
        xk = x.T @ solved_r[k]
        for other in range(k, COMPONENTS):
            xl = x.T @ solved_r[other]
            value = 0.0
            for i in range(n):
                value += spread_r[k][i, 0] * solved_r[other][i, 0]
            value -= (xk.T @ cov @ xl)[0, 0]
            average[k, other] = 0.5 * value
            average[other, k] = average[k, other]
            information_kl = norm[k, other]
            if restricted:
                solved = _solve(spread_x[other], w, s, c, big_a, e, papers, sets)
                information_kl += -2.0 * np.trace(cov @ (spread_x[k].T @ solved)) + np.trace(
                    cov @ products[k] @ cov @ products[other]
                )
            expected[k, other] = 0.5 * information_kl
            expected[other, k] = expected[k, other]
    return slope, expected, 2.0 * average - expected


@kernel
def _step(matrix: np.ndarray, slope: np.ndarray, free: np.ndarray) -> tuple[np.ndarray, bool]:
    """Solve for the free components; false if the matrix is not positive definite on them."""
    count = 0
    for k in range(COMPONENTS):
        if free[k]:
            count += 1
    small = np.empty((count, count))
    right = np.empty(count)
    places = np.empty(count, np.int64)
    r = 0
    for k in range(COMPONENTS):
        if free[k]:
            places[r] = k
            r += 1
    for r in range(count):
        right[r] = slope[places[r]]
        for q in range(count):
            small[r, q] = matrix[places[r], places[q]]
    step = np.zeros(COMPONENTS)
    # Cholesky by hand: it says whether the matrix is positive definite without raising.
    lower = np.zeros((count, count))
    for r in range(count):
        for q in range(r + 1):
            total = small[r, q]
            for k in range(q):
                total -= lower[r, k] * lower[q, k]
            if r == q:
                if not total > 1e-13 * abs(small[r, r]):
                    return step, False
                lower[r, r] = np.sqrt(total)
            else:
                lower[r, q] = total / lower[q, q]
    for r in range(count):
        for k in range(r):
            right[r] -= lower[r, k] * right[k]
        right[r] /= lower[r, r]
    for back in range(count):
        r = count - 1 - back
        for k in range(r + 1, count):
            right[r] -= lower[k, r] * right[k]
        right[r] /= lower[r, r]
        step[places[r]] = right[r]
    return step, True


@kernel
def climb(
    start: np.ndarray,
    active: np.ndarray,
    y: np.ndarray,
    v: np.ndarray,
    x: np.ndarray,
    papers: np.ndarray,
    sets: np.ndarray,
    m: int,
    n_sets: int,
    restricted: bool,
) -> tuple[np.ndarray, float, bool, int]:
    """A local maximum over θ ≥ 0 from a start: (θ, log likelihood, converged, steps).

    Newton steps where the observed information is positive definite, scoring steps where not; components that would
    fall below 0 are set to exactly 0 and stay there while the slope says so. Steps are halved until the likelihood
    rises. Converged: the step promises a relative gain below 1e-13, or no step of any length gains any more and the
    promise is below 1e-9.
    """
    theta = start.copy()
    value, beta, information = nested_fit(theta, y, v, x, papers, sets, m, n_sets, restricted)
    for steps in range(MOST_STEPS):
        slope, expected, observed = nested_slopes(
            theta, y, v, x, papers, sets, m, n_sets, restricted, beta, information
        )
        free = np.empty(COMPONENTS, np.bool_)
        any_free = False
        for k in range(COMPONENTS):
            free[k] = active[k] and (theta[k] > 0.0 or slope[k] > 0.0)
            any_free = any_free or free[k]
        if not any_free:
            return theta, value, True, steps
        step, positive = _step(observed, slope, free)
        if not positive:
            step, positive = _step(expected, slope, free)
            if not positive:
                return theta, value, False, steps
        gain = 0.0
        for k in range(COMPONENTS):
            gain += 0.5 * step[k] * slope[k]
        length = 1.0
        moved = False
        small = gain < 1e-13 * (1.0 + abs(value))
        for _ in range(40):
            trial = theta.copy()
            for k in range(COMPONENTS):
                if free[k]:
                    trial[k] = max(0.0, theta[k] + length * step[k])
            new, new_beta, new_information = nested_fit(trial, y, v, x, papers, sets, m, n_sets, restricted)
            # At the top the gain is below the rounding of the likelihood: the last step is taken on trust.
            if new > value or (small and new >= value - 1e-12 * (1.0 + abs(value))):
                moved = True
                theta, value, beta, information = trial, new, new_beta, new_information
                break
            length *= 0.5
        if small:
            return theta, value, True, steps + 1
        if not moved:
            return theta, value, gain < 1e-9 * (1.0 + abs(value)), steps + 1
    return theta, value, False, MOST_STEPS


@kernel
def search(
    active: np.ndarray,
    y: np.ndarray,
    v: np.ndarray,
    x: np.ndarray,
    papers: np.ndarray,
    sets: np.ndarray,
    m: int,
    n_sets: int,
    restricted: bool,
    smallest: float,
    largest: float,
    hint: np.ndarray,
    has_hint: bool,
) -> tuple[np.ndarray, float, bool, int]:
    """The best of several climbs: (θ, log likelihood, converged, likelihoods evaluated and steps climbed).

    The likelihood is evaluated on a grid: total variance 0 and values a factor of three apart from `smallest` to
    `largest`, shared out over the active levels in quarters. Climbs start from the three highest grid points (no two of
    them neighbours in the total) and from the hint. This finds the highest maximum unless it is narrower than the grid;
    it is not a certificate, as there is for two levels.
    """
    totals = 3 + int(np.ceil(np.log(largest / smallest) / np.log(3.0)))
    best_theta = np.zeros(COMPONENTS)
    best_value = -np.inf
    best_converged = False
    work = 0
    height = np.full(totals, -np.inf)
    shares = np.zeros((totals, COMPONENTS))
    theta = np.zeros(COMPONENTS)
    quarters = 4
    for t in range(totals):
        total = 0.0 if t == 0 else smallest * (largest / smallest) ** ((t - 1) / (totals - 2.0))
        for i in range(quarters + 1):
            for j in range(quarters + 1 - i):
                theta[2] = total * i / quarters
                theta[1] = total * j / quarters
                theta[0] = total * (quarters - i - j) / quarters
                allowed = True
                for k in range(COMPONENTS):
                    allowed = allowed and (active[k] or theta[k] == 0.0)
                if not allowed or (t == 0 and (i > 0 or j > 0)):
                    continue
                value, _, _ = nested_fit(theta, y, v, x, papers, sets, m, n_sets, restricted)
                work += 1
                if value > height[t]:
                    height[t] = value
                    shares[t, :] = theta
    for climbs in range(4):
        start = np.zeros(COMPONENTS)
        if climbs == 3:
            if not has_hint:
                break
            start[:] = hint
        else:
            t = int(np.argmax(height))
            if height[t] == -np.inf:
                continue
            start[:] = shares[t, :]
            height[t] = -np.inf
            if t > 0:
                height[t - 1] = -np.inf
            if t + 1 < totals:
                height[t + 1] = -np.inf
        found, value, converged, steps = climb(start, active, y, v, x, papers, sets, m, n_sets, restricted)
        work += steps
        if best_value == -np.inf or value > best_value + 1e-12 * abs(best_value):
            best_theta, best_value, best_converged = found, value, converged
    return best_theta, best_value, best_converged, work


@kernel
def fit_nested_prefixes(
    y: np.ndarray, v: np.ndarray, papers: np.ndarray, ends: np.ndarray, restricted: bool
) -> np.ndarray:
    """Mean-only fits of prefixes, papers numbered in order of first appearance.

    Rows of (k, papers, mean, standard error, θ₁, θ₀, converged, work, separable). Each step climbs from the answer
    before; the full `search` is made whenever the number of estimates has grown by a tenth since the last one (so at
    every step while there are few), when an answer has moved by more than a half or met or left 0, and at the last
    step.
    """
    groups = ends.shape[0]
    result = np.zeros((groups, 9))
    hint = np.zeros(COMPONENTS)
    searched_at = 0
    for g in range(groups):
        n = ends[g]
        yg = y[:n]
        vg = v[:n]
        pg = papers[:n]
        m = pg.max() + 1
        sets = np.arange(m)
        x = np.ones((n, 1))
        largest = max((yg.max() - yg.min()) ** 2, vg.min())
        active = np.zeros(COMPONENTS, np.bool_)
        separable = m < n
        active[0] = separable and n > 1
        active[1] = m > 1
        theta = np.zeros(COMPONENTS)
        converged = True
        work = 0
        if n > 1:
            due = n >= 1.1 * searched_at or g == groups - 1
            if not due:
                theta, _, converged, work = climb(hint, active, yg, vg, x, pg, sets, m, m, restricted)
                for k in range(2):
                    due = due or not abs(theta[k] - hint[k]) <= 0.5 * hint[k]
                due = due or not converged
            if due:
                theta, _, converged, steps = search(
                    active, yg, vg, x, pg, sets, m, m, restricted, 1e-2 * vg.min(), largest, hint, g > 0
                )
                work += steps
                searched_at = n
        hint[:] = theta
        _, beta, information = nested_fit(theta, yg, vg, x, pg, sets, m, m, restricted)
        result[g, 0] = n
        result[g, 1] = m
        result[g, 2] = beta[0]
        result[g, 3] = 1.0 / np.sqrt(information[0, 0])
        result[g, 4] = theta[1]
        result[g, 5] = theta[0]
        result[g, 6] = 1.0 if converged else 0.0
        result[g, 7] = work
        result[g, 8] = 1.0 if separable and m > 1 else 0.0
    return result
