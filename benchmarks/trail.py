"""How fast is a trail? Each measurement against the plain way with a general-purpose library, in the same run.

    python -m benchmarks.trail                a table
    BENCH_JSON=1 python -m benchmarks.trail   one JSON object a line

A benchmark is a function without arguments that returns `{"name", "value", "unit", "yardstick", "ratio"}`: our time,
its unit, the yardstick's time in the same unit and how many times longer the yardstick takes; `note` says what was
measured and what was extrapolated. Before it reports a time it checks that both ways give the same numbers, and raises
if they do not. `BENCHMARKS` is the registry. Everything runs on one thread.
"""

from __future__ import annotations

import json
import os
import time
import warnings
from collections.abc import Callable
from typing import Any

import numpy as np
from scipy import optimize
from statsmodels.stats.meta_analysis import combine_effects

from analysis.methods import trail
from analysis.methods.warm import compile_all

Result = dict[str, Any]


def invented_estimates(n: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Invented effects with true heterogeneity (τ = 0.3) and standard errors from 0.05 to 0.5."""
    rng = np.random.default_rng(seed)
    errors = np.exp(rng.uniform(np.log(0.05), np.log(0.5), n))
    return 0.2 + 0.3 * rng.standard_normal(n) + errors * rng.standard_normal(n), errors**2


def best_time(run: Callable[[], Any], repeats: int = 5) -> float:
    """Shortest of several runs, in seconds."""
    times = []
    for _ in range(repeats):
        started = time.perf_counter()
        run()
        times.append(time.perf_counter() - started)
    return min(times)


def agree(ours: np.ndarray, theirs: np.ndarray, tolerance: float, what: str) -> None:
    """Raise unless both are equal to a relative tolerance."""
    worst = float(np.max(np.abs(ours - theirs) / np.maximum(np.abs(theirs), 1e-300)))
    if not worst <= tolerance:
        raise AssertionError(f"{what} differ by {worst:.2e} relative, more than {tolerance:g}")


def result(name: str, seconds: float, yardstick: float, note: str) -> Result:
    """One line of the report."""
    return {
        "name": name,
        "value": seconds * 1e3,
        "unit": "ms",
        "yardstick": yardstick * 1e3,
        "ratio": yardstick / seconds,
        "note": note,
    }


def dersimonian_laird_2000() -> Result:
    """2,000 estimates one by one, DerSimonian-Laird, against statsmodels' `combine_effects` on every prefix."""
    n = 2000
    y, v = invented_estimates(n, seed=1)
    groups = np.arange(n)

    def ours() -> Any:
        return trail(y, v, groups, heterogeneity="dersimonian-laird", interval="normal")

    path = ours()
    theirs = np.empty((n - 1, 3))
    started = time.perf_counter()
    for k in range(2, n + 1):
        fit = combine_effects(y[:k], v[:k], method_re="chi2")
        theirs[k - 2] = fit.tau2, fit.mean_effect_re, fit.sd_eff_w_re
    yardstick = time.perf_counter() - started
    # statsmodels does not cut τ² off at 0, so the two are comparable where its value is positive.
    positive = theirs[:, 0] > 0.0
    if positive.mean() < 0.99:
        raise AssertionError("the invented data should be heterogeneous in nearly every prefix")
    for ours_column, column, what in (
        (path.tau2, 0, "between-study variances"),
        (path.value, 1, "means"),
        (path.standard_error, 2, "standard errors"),
    ):
        agree(ours_column[1:][positive], theirs[positive, column], 1e-9, what)
    note = f"per-prefix statsmodels combine_effects; equal to 1e-9 on the {int(positive.sum())} prefixes with τ² > 0"
    return result("trail-dersimonian-laird-2000", best_time(ours), yardstick, note)


def scipy_restricted_fit(y: np.ndarray, v: np.ndarray) -> tuple[float, float]:
    """τ² and mean by SciPy's bounded minimiser over the restricted likelihood, in NumPy arrays."""

    def minus_twice_log_likelihood(tau2: float) -> float:
        total = v + tau2
        w = 1.0 / total
        weight = w.sum()
        residual = y - (w @ y) / weight
        return float(np.log(total).sum() + np.log(weight) + w @ (residual * residual))

    upper = float(np.var(y)) * 4.0 + 1e-6
    found = optimize.minimize_scalar(
        minus_twice_log_likelihood, bounds=(0.0, upper), method="bounded", options={"xatol": 1e-9 * upper}
    )
    tau2 = float(found.x)
    if minus_twice_log_likelihood(0.0) <= found.fun:
        tau2 = 0.0
    w = 1.0 / (v + tau2)
    return tau2, float((w @ y) / w.sum())


def restricted_maximum_likelihood(n: int, measured: int) -> Result:
    """`n` estimates one by one; the yardstick is timed on `measured` prefixes spread evenly over all of them.

    A minimiser that compares heights knows the place of a maximum to about the square root of rounding: on these data
    that is just good enough for equality to 1e-6.
    """
    y, v = invented_estimates(n, seed=2)
    groups = np.arange(n)

    def ours() -> Any:
        return trail(y, v, groups, interval="normal")

    path = ours()
    prefixes = np.unique(np.linspace(2, n, measured).round().astype(int))
    theirs = np.empty((prefixes.size, 2))
    started = time.perf_counter()
    for row, k in enumerate(prefixes):
        theirs[row] = scipy_restricted_fit(y[:k], v[:k])
    yardstick = (time.perf_counter() - started) / prefixes.size * (n - 1)
    tau2 = path.tau2[prefixes - 1]
    inside = theirs[:, 0] > 0.0
    if not np.array_equal(inside, tau2 > 0.0):
        raise AssertionError("the two disagree about which prefixes have τ² = 0")
    agree(tau2[inside], theirs[inside, 0], 1e-6, "between-study variances")
    agree(path.value[prefixes - 1], theirs[:, 1], 1e-6, "means")
    everything = prefixes.size == n - 1
    part = "all prefixes" if everything else f"{prefixes.size} prefixes evenly spread, extrapolated to {n - 1}"
    note = f"per-prefix SciPy minimize_scalar (bounded) over the restricted likelihood; {part}; equal to 1e-6"
    return result(f"trail-restricted-maximum-likelihood-{n}", best_time(ours), yardstick, note)


def restricted_maximum_likelihood_500() -> Result:
    """500 estimates; every prefix of the yardstick is measured."""
    return restricted_maximum_likelihood(500, 499)


def restricted_maximum_likelihood_5000() -> Result:
    """5,000 estimates; 500 prefixes of the yardstick are measured, the rest extrapolated."""
    return restricted_maximum_likelihood(5000, 500)


BENCHMARKS: dict[str, Callable[[], Result]] = {
    "trail-dersimonian-laird-2000": dersimonian_laird_2000,
    "trail-restricted-maximum-likelihood-500": restricted_maximum_likelihood_500,
    "trail-restricted-maximum-likelihood-5000": restricted_maximum_likelihood_5000,
}


def main() -> None:
    """Run all benchmarks and print them."""
    compile_all()
    as_json = os.environ.get("BENCH_JSON") == "1"
    if not as_json:
        print(f"{'benchmark':<44}{'ours':>12}{'yardstick':>14}{'ratio':>9}")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # combine_effects on its first prefixes
        for run in BENCHMARKS.values():
            line = run()
            if as_json:
                print(json.dumps(line), flush=True)
            else:
                ours, theirs = f"{line['value']:.2f} {line['unit']}", f"{line['yardstick']:.0f} {line['unit']}"
                print(f"{line['name']:<44}{ours:>12}{theirs:>14}{line['ratio']:>8.0f}x", flush=True)
                print(f"    {line['note']}")


if __name__ == "__main__":
    main()
