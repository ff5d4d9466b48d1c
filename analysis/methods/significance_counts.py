"""Two counts of significant estimates: too many just above the line, and too many altogether.

**Caliper test** (Gerber & Malhotra 2008): of the estimates whose |z| lies within a width of the critical value, about
half should lie on either side, since z-values are smooth over a short stretch; a binomial(½) test. A wide caliper
breaks that assumption, a narrow one has few estimates in it.

**Excess significance** (Ioannidis & Trikalinos 2007): O estimates are significant, E = Σ power are expected if the true
effect is that given; A = (O−E)²/E + (O−E)²/(k−E), χ² with 1 degree of freedom. Under heterogeneity estimates of unequal
true effects also give an excess.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from .adequately_powered import power_two_tailed
from .errors import InvalidInput, NotEstimable
from .inputs import effects_and_variances
from .pooling import pool_effects

CRITICAL = 1.96
WIDTHS = (0.1, 0.2, 0.3, 0.5)


@dataclass(frozen=True, slots=True)
class Caliper:
    """Counts just over and just under the critical value; chance of so uneven a split (two-sided), and of so many over
    (one-sided), if both sides were equally likely. `width` is None when the counts were given."""

    over: int
    under: int
    p_two_sided: float
    p_one_sided: float
    width: float | None = None
    critical: float | None = None
    estimable: Literal[True] = True


def caliper_test(over: int, under: int) -> Caliper | NotEstimable:
    """Binomial(½) test of two counts (Gerber & Malhotra 2008). NotEstimable when both are 0; counts below 0 are refused
    with InvalidInput."""
    if over < 0 or under < 0:
        raise InvalidInput("over" if over < 0 else "under", "must be a count, not negative")
    if over + under == 0:
        return NotEstimable("No estimate lies within the caliper.", 0)
    return Caliper(
        over=over,
        under=under,
        p_two_sided=float(stats.binomtest(over, over + under).pvalue),
        p_one_sided=float(stats.binomtest(over, over + under, alternative="greater").pvalue),
    )


def caliper_tests(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    widths: Sequence[float] = WIDTHS,
    critical: float = CRITICAL,
) -> tuple[Caliper | NotEstimable, ...]:
    """A caliper test of |effect/SE| for each width, in the order given.

    Over are values in [critical, critical + width), under those in [critical − width, critical). Widths and critical
    value in units of z, positive. NotEstimable for a width within which nothing lies. Raises InvalidInput.
    """
    y, v = effects_and_variances(effects, variances)
    if not critical > 0.0:
        raise InvalidInput("critical", f"must be positive, not {critical}")
    z = np.abs(y) / np.sqrt(v)
    results: list[Caliper | NotEstimable] = []
    for place, width in enumerate(widths):
        if not 0.0 < width < np.inf:
            raise InvalidInput("widths", f"must be positive, not {width}", place)
        over = int(((z >= critical) & (z < critical + width)).sum())
        under = int(((z < critical) & (z >= critical - width)).sum())
        test = caliper_test(over, under)
        if isinstance(test, Caliper):
            test = Caliper(over, under, test.p_two_sided, test.p_one_sided, float(width), critical)
        results.append(test)
    return tuple(results)


@dataclass(frozen=True, slots=True)
class ExcessSignificance:
    """Observed and expected numbers of significant estimates.

    true_effect : the one the power is worked out for.  observed, expected : O and E.
    statistic, p : A and its χ²(1) tail; two-sided, so that a deficit counts too.
    p_binomial : P(X ≥ O) for X binomial with k trials and the mean power.
    excess : O > E.
    """

    true_effect: float
    observed: int
    expected: float
    statistic: float
    p: float
    p_binomial: float
    excess: bool
    alpha: float
    k: int
    estimable: Literal[True] = True


def excess_significance(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    true_effect: float | None = None,
    alpha: float = 0.05,
) -> ExcessSignificance | NotEstimable:
    """Test of excess significance (Ioannidis & Trikalinos 2007).

    effects, variances : (k,) arrays.  true_effect : in the unit of the effects; None for the common-effect mean.
    alpha : two-sided level at which an estimate counts as significant, |effect/SE| ≥ z.

    NotEstimable when there are no estimates, or when every estimate is so precise that its power is 1 and yet some are
    not significant. Raises InvalidInput.
    """
    if not 0.0 < alpha < 1.0:
        raise InvalidInput("alpha", f"must lie between 0 and 1, not {alpha}")
    y, v = effects_and_variances(effects, variances)
    k = y.size
    if true_effect is None:
        common = pool_effects(y, v, model="common-effect", interval="normal")
        if isinstance(common, NotEstimable):
            return common
        true_effect = common.value
    elif not np.isfinite(true_effect):
        raise InvalidInput("true_effect", "must be finite")
    if k == 0:
        return NotEstimable("There are no estimates to count.", 0)
    errors = np.sqrt(v)
    z = -float(special.ndtri(0.5 * alpha))
    signal = abs(true_effect) / errors
    observed = int((np.abs(y) / errors >= z).sum())
    expected = float(power_two_tailed(true_effect, errors, alpha).sum())
    # The number expected not to be significant is summed by itself: k − E would lose its digits where power is near 1.
    expected_not = float((special.ndtr(z - signal) - special.ndtr(-z - signal)).sum())
    # (O − E)² = ((k − O) − (k − E))²: of two equal differences take the one between smaller numbers.
    gap = observed - expected if expected < expected_not else expected_not - (k - observed)
    if expected_not <= 0.0 and gap != 0.0:
        return NotEstimable("Every estimate has power 1, so none should fail to be significant.", k)
    statistic = gap * gap / expected + (gap * gap / expected_not if expected_not > 0.0 else 0.0)
    if not np.isfinite(statistic):
        return NotEstimable("The power of the estimates is too near 1 for the test.", k)
    chance = min(1.0, expected / k)
    return ExcessSignificance(
        true_effect=true_effect,
        observed=observed,
        expected=expected,
        statistic=statistic,
        p=float(special.chdtrc(1, statistic)),
        p_binomial=float(stats.binom.sf(observed - 1, k, chance)),
        excess=gap > 0.0,
        alpha=alpha,
        k=k,
    )
