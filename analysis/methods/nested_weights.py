"""What each estimate weighs in a three-level mean.

The generalised least squares mean is a'y with a = V⁻¹1/(1'V⁻¹1). V is block diagonal, a block being
diag(v + σ²(estimate)) + σ²(paper)·11', whose inverse applied to 1 is d/(1 + σ²(paper)·Σd) with d = 1/(v + σ²(estimate))
(Sherman & Morrison 1950): O(n), no matrix.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput
from .influence import group_numbers
from .inputs import FloatArray, float_array


def three_level_weights(
    variances: npt.ArrayLike, papers: npt.ArrayLike, *, between_papers: float, within_papers: float
) -> FloatArray:
    """Weights of the estimates in the mean, summing to 1.

    variances : (n,) sampling variances, each > 0.  papers : (n,) labels.
    between_papers, within_papers : σ²(paper), σ²(estimate), each ≥ 0; both 0 gives inverse-variance weights.
    Empty for no estimates. Raises InvalidInput.
    """
    v = float_array("variances", variances)
    if (v <= 0.0).any():
        raise InvalidInput("variances", "must be positive", int(np.argmax(v <= 0.0)))
    if not (between_papers >= 0.0 and within_papers >= 0.0):
        raise InvalidInput("between_papers", "variances between and within papers cannot be negative")
    labels, paper_of = group_numbers("papers", papers, v.size)
    if v.size == 0:
        return v
    own = 1.0 / (v + within_papers)
    together = np.bincount(paper_of, weights=own, minlength=labels.size)
    raw = own / (1.0 + between_papers * together[paper_of])
    weights: FloatArray = raw / raw.sum()
    return weights
