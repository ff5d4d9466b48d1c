"""Compile every kernel and keep the result on disk, so that no request waits for the compiler.

`python -m analysis.methods.warm` (at image build, after an upgrade, or in a development checkout) takes some seconds
the first time and next to nothing after that. `compiled` says where the compiled code is kept.
"""

from __future__ import annotations

import time

from .between_variance import ESTIMATORS
from .compiled import cache_directory
from .pooling import pool_effects
from .robust import robust_fit
from .selection_model import selection_model
from .small_study_tests import rank_correlation_test
from .three_level import METHODS, fit_three_level, three_level_trail
from .trail import trail
from .trim_and_fill import trim_and_fill


def compile_all() -> float:
    """Call every compiled function once with arrays of the types they will meet; returns the seconds it took."""
    started = time.perf_counter()
    effects = [0.1, 0.5, -0.2, 0.9]
    variances = [0.01, 0.04, 0.02, 0.03]
    for method in ("q-profile", "profile-likelihood"):
        pool_effects(effects, variances, tau2_interval=method)
    for estimator in ESTIMATORS:
        trail(effects, variances, [0, 1, 2, 3], heterogeneity=estimator)
    papers = [0, 0, 1, 2]
    design = [[1.0, 0.0], [1.0, 1.0], [1.0, 2.0], [1.0, 4.0]]
    for method in METHODS:
        fit_three_level(effects, variances, papers, method=method)
        fit_three_level(effects, variances, papers, design, method=method)
        three_level_trail(effects, variances, papers, [0, 1, 2, 3], method=method)
    robust_fit(effects, [1.0, 2.0, 1.0, 1.0], papers)
    robust_fit(effects, [1.0, 2.0, 1.0, 1.0], papers, design)
    rank_correlation_test(effects, variances)
    trim_and_fill(effects, variances)
    selection_model([0.1, 0.5, -0.2, 0.9, 0.3], [0.01, 0.04, 0.02, 0.03, 0.02])
    return time.perf_counter() - started


def main() -> None:
    """Compile and say what was done."""
    seconds = compile_all()
    print(f"Kernels are compiled and kept in {cache_directory} ({seconds:.1f} s).")  # noqa: T201


if __name__ == "__main__":
    main()
