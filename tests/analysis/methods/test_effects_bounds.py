"""Standard errors of a marginal effect when covariances are missing.

The check model is lwage ~ educ + exper + exper^2 + educ*exper on the wage1 data of Wooldridge's Introductory
Econometrics (n = 526), fitted with statsmodels OLS outside this project; its numbers stand below. The bounds
there follow from the triangle inequality. Elsewhere the bounds are held against brute force: random correlation
matrices never leave them, and a search over unit vectors by SciPy's SLSQP, an independent route, reaches them.
"""

import math

import numpy as np
import pytest
import scipy.optimize
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods.effects_bounds import KnownCombination, standard_error_bounds
from analysis.methods.effects_regression import (
    elasticity,
    scaled_slope,
    semi_elasticity,
    standardised_coefficient,
    term_derivative,
)
from analysis.methods.errors import InvalidInput, UnknownChoice

EDUC, EXPER, SQUARE, PRODUCT = range(4)
COEFFICIENTS = (0.117094055315, 0.0615300622655, -0.000820322233961, -0.00135080485438)
ERRORS = (0.0124039766894, 0.00921375070946, 0.000121732230174, 0.000502206036628)
COVARIANCES = {
    (EDUC, EXPER): 7.305446405652e-05,
    (EDUC, SQUARE): -2.539437950272e-07,
    (EDUC, PRODUCT): -4.990471500349e-06,
    (EXPER, SQUARE): -8.719015220752e-07,
    (EXPER, PRODUCT): -3.831543124828e-06,
    (SQUARE, PRODUCT): 1.993408870902e-08,
}
MEAN_EDUC, MEAN_EXPER = 12.562737642585551, 17.017110266159698

# c; effect; SE with all covariances; min, uncorrelated and max without any.
WAGE1 = {
    "educ at means": (
        (1, 0, 0, MEAN_EXPER),
        0.0941072601604,
        0.00755298473655,
        0.00385788118774,
        0.015063013843,
        0.020950072191,
    ),
    "exper at means": (
        (0, 1, 2 * MEAN_EXPER, MEAN_EDUC),
        0.0166412274555,
        0.00181397987438,
        0.0,
        0.0119106123084,
        0.0196658949578,
    ),
    "educ at exper 10": (
        (1, 0, 0, 10),
        0.103586006772,
        0.00890338688512,
        0.00738191632309,
        0.013382067405,
        0.0174260370557,
    ),
    "exper at exper 10, educ 12": (
        (0, 1, 20, 12),
        0.0289139593338,
        0.0031423451827,
        0.000752633666445,
        0.0112755960617,
        0.0176748677525,
    ),
    "educ at exper 0, the linear coefficient": (
        (1, 0, 0, 0),
        0.117094055315,
        0.0124039766894,
        0.0124039766894,
        0.0124039766894,
        0.0124039766894,
    ),
}


@pytest.mark.parametrize(("c", "effect", "error", "low", "uncorrelated", "high"), WAGE1.values(), ids=WAGE1)
def test_wooldridge_wage1_with_all_covariances_and_with_none(c, effect, error, low, uncorrelated, high):
    assert math.fsum(x * b for x, b in zip(c, COEFFICIENTS, strict=True)) == pytest.approx(effect, rel=1e-10)
    exact = standard_error_bounds(c, ERRORS, COVARIANCES)
    assert exact.is_exact
    # The variance is a small remainder of terms printed with 12 digits: a few of them cancel.
    assert exact.high == pytest.approx(error, rel=1e-7)
    nothing = standard_error_bounds(c, ERRORS)
    assert (nothing.uncorrelated, nothing.high) == pytest.approx((uncorrelated, high), rel=1e-10)
    assert nothing.low == pytest.approx(low, rel=1e-9, abs=1e-15)


def test_wooldridge_wage1_with_one_printed_covariance():
    # |sqrt(V12) -+ z3| with V12 the variance of the two terms whose covariance is printed.
    c = WAGE1["exper at means"][0]
    bounds = standard_error_bounds(c, ERRORS, {(EXPER, SQUARE): COVARIANCES[EXPER, SQUARE]})
    assert bounds.method == "closed-form"
    assert bounds.low == pytest.approx(0.000226143705574, rel=1e-6)  # a difference of the numbers printed
    assert bounds.high == pytest.approx(0.0128443090669, rel=1e-9)


def test_wooldridge_wage1_without_the_interaction():
    # lwage ~ educ + exper + exper^2: errors, covariance and bounds of exper at its mean.
    c, errors = (1, 2 * MEAN_EXPER), (0.00519651856592, 0.000115764299876)
    nothing = standard_error_bounds(c, errors)
    assert nothing.low == pytest.approx(0.00125657085418, rel=1e-9)
    assert nothing.uncorrelated == pytest.approx(0.00652127235877, rel=1e-10)
    assert nothing.high == pytest.approx(0.00913646627767, rel=1e-10)
    exact = standard_error_bounds(c, errors, {(0, 1): -5.758632667082e-07})
    assert exact.high == pytest.approx(0.00182452140191, rel=1e-9)
    effect = 0.0410088754866 * c[0] - 0.00071355815893 * c[1]
    assert effect == pytest.approx(0.016723479743, rel=1e-9)


def test_wooldridge_wage1_a_printed_error_of_one_combination_settles_two_terms():
    # The error of the educ effect at the mean recovers cov(educ, educ*exper) = -4.99047150035e-06, and with it
    # the error of the effect anywhere else.
    printed = WAGE1["educ at means"][2]
    known = KnownCombination((1.0, MEAN_EXPER), printed, printed)
    bounds = standard_error_bounds((1.0, 10.0), (ERRORS[EDUC], ERRORS[PRODUCT]), known=known)
    assert bounds.known_combination_used
    assert bounds.low == pytest.approx(WAGE1["educ at exper 10"][2], rel=1e-8)
    assert bounds.high == pytest.approx(WAGE1["educ at exper 10"][2], rel=1e-8)
    covariance = (bounds.high**2 - ERRORS[EDUC] ** 2 - 100 * ERRORS[PRODUCT] ** 2) / 20
    assert covariance == pytest.approx(-4.99047150035e-06, rel=1e-7)


def test_a_printed_error_tightens_three_terms_without_settling_them():
    c, _, true, *_ = WAGE1["exper at exper 10, educ 12"]
    at_means, _, printed, *_ = WAGE1["exper at means"]
    known = KnownCombination(tuple(map(float, at_means[1:])), printed * (1 - 1e-3), printed * (1 + 1e-3))
    free = standard_error_bounds(c[1:], ERRORS[1:])
    tight = standard_error_bounds(c[1:], ERRORS[1:], known=known)
    assert tight.converged
    assert free.low <= tight.low <= true <= tight.high < free.high


def test_an_impossible_printed_error_is_not_used():
    known = KnownCombination((1.0, 1.0, 1.0), 30.0, 31.0)
    bounds = standard_error_bounds((1.0, 2.0, 3.0), (1.0, 1.0, 1.0), known=known)
    assert bounds.known_combination_used is False
    assert bounds.high == pytest.approx(6.0, rel=1e-6)
    two = standard_error_bounds((1.0, 2.0), (1.0, 1.0), known=KnownCombination((1.0, 1.0), 30.0, 31.0))
    assert two.known_combination_used is False
    assert (two.low, two.high) == pytest.approx((1.0, 3.0), rel=1e-12)


# --- brute force
# ---------------------------------------------------------------------------------------------------


def random_correlations(rng, n):
    """A random correlation matrix, of full rank or less."""
    rows = rng.normal(size=(n, rng.integers(1, n + 2)))
    rows /= np.linalg.norm(rows, axis=1)[:, np.newaxis]
    matrix = rows @ rows.T
    np.fill_diagonal(matrix, 1.0)
    return matrix


def error_of(z, matrix):
    return math.sqrt(max(float(z @ matrix @ z), 0.0))


def search(z, fixed, sign, rng, u=None, known=None, starts=12):
    """The extreme of the error over unit vectors in R^n with printed inner products, by SLSQP from several
    starts."""
    n = len(z)

    def gram(flat):
        rows = flat.reshape(n, n)
        return rows @ rows.T

    constraints = [{"type": "eq", "fun": lambda flat: np.diag(gram(flat)) - 1}]
    for (i, j), value in fixed.items():
        constraints.append({"type": "eq", "fun": lambda flat, i=i, j=j, value=value: gram(flat)[i, j] - value})
    if u is not None:
        constraints.append({"type": "eq", "fun": lambda flat: u @ gram(flat) @ u - known**2})
    best = None
    for _ in range(starts):
        start = rng.normal(size=(n, n))
        start /= np.linalg.norm(start, axis=1)[:, np.newaxis]
        found = scipy.optimize.minimize(
            lambda flat: -sign * float(z @ gram(flat) @ z),
            start.ravel(),
            method="SLSQP",
            constraints=constraints,
            options={"maxiter": 500, "ftol": 1e-14},
        )
        missed = max(float(np.max(np.abs(each["fun"](found.x)))) for each in constraints)
        if missed < 1e-8 and (best is None or sign * error_of(z, gram(found.x)) > sign * best):
            best = error_of(z, gram(found.x))
    return best


PRINTED = {
    "nothing": [],
    "one of three": [(0, 1)],
    "a path through three": [(0, 1), (1, 2)],
    "a path through four": [(0, 1), (1, 2), (2, 3)],
    "a star": [(0, 1), (0, 2), (0, 3)],
    "two pairs": [(0, 1), (2, 3)],
    "a cycle": [(0, 1), (1, 2), (2, 3), (0, 3)],
    "all but one": [(0, 1), (0, 2), (0, 3), (1, 2), (1, 3)],
}


@pytest.mark.parametrize("pairs", PRINTED.values(), ids=PRINTED)
def test_the_bounds_are_reached_by_an_independent_search(pairs):
    rng = np.random.default_rng(7)
    n = 1 + max((max(pair) for pair in pairs), default=2)
    n = max(n, 3)
    rows = rng.normal(size=(n, n))
    rows /= np.linalg.norm(rows, axis=1)[:, np.newaxis]
    matrix = rows @ rows.T
    errors, c = rng.uniform(0.5, 2.0, n), rng.normal(size=n)
    z = c * errors
    fixed = {pair: float(matrix[pair]) for pair in pairs}
    covariances = {(i, j): value * errors[i] * errors[j] for (i, j), value in fixed.items()}
    bounds = standard_error_bounds(list(c), list(errors), covariances)
    assert bounds.converged
    # Near zero the square root magnifies what the search misses of its constraints.
    assert bounds.low == pytest.approx(search(z, fixed, -1, rng), rel=1e-5, abs=2e-4)
    assert bounds.high == pytest.approx(search(z, fixed, 1, rng), rel=1e-6)


def test_the_bounds_with_a_known_combination_are_reached_by_an_independent_search():
    rng = np.random.default_rng(11)
    rows = rng.normal(size=(3, 3))
    rows /= np.linalg.norm(rows, axis=1)[:, np.newaxis]
    matrix = rows @ rows.T
    errors, c, other = rng.uniform(0.5, 2.0, 3), rng.normal(size=3), rng.normal(size=3)
    known = error_of(other * errors, matrix)
    bounds = standard_error_bounds(list(c), list(errors), known=KnownCombination(tuple(other), known, known))
    found = [search(c * errors, {}, sign, rng, u=other * errors, known=known) for sign in (-1, 1)]
    assert bounds.method == "semidefinite"
    assert bounds.known_combination_used
    assert bounds.low == pytest.approx(found[0], rel=1e-5)
    assert bounds.high == pytest.approx(found[1], rel=1e-6)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(2, 5), st.floats(0, 1), st.booleans())
def test_no_correlation_matrix_leaves_the_bounds(seed, n, share_printed, with_known):
    rng = np.random.default_rng(seed)
    matrix = random_correlations(rng, n)
    errors, c = rng.uniform(0.1, 10.0, n), rng.normal(size=n)
    pairs = [(i, j) for i in range(n) for j in range(i + 1, n) if rng.random() < share_printed]
    covariances = {(i, j): float(matrix[i, j] * errors[i] * errors[j]) for i, j in pairs}
    known = None
    if with_known:
        other = rng.normal(size=n)
        error = error_of(other * errors, matrix)
        known = KnownCombination(tuple(map(float, other)), error * 0.999, error * 1.001)
    bounds = standard_error_bounds(list(c), list(errors), covariances, known=known)
    true = error_of(c * errors, matrix)
    # Printed covariances of a singular matrix are possible only to the last digit, so variances are held to 1e-7.
    largest = float(np.abs(c * errors).sum())
    assert bounds.low**2 <= true**2 + 1e-7 * largest**2
    assert bounds.high**2 >= true**2 - 1e-7 * largest**2
    assert bounds.low <= bounds.uncorrelated <= bounds.high
    assert bounds.shrinkage == pytest.approx(1.0, abs=1e-6)
    assert bounds.known_combination_used is (True if with_known else None)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 6), st.floats(1e-6, 1e6))
def test_bounds_scale_and_ignore_the_sign_of_c(seed, n, factor):
    rng = np.random.default_rng(seed)
    errors, c = rng.uniform(0.1, 10.0, n), rng.normal(size=n)
    covariances = {(0, 1): 0.3 * errors[0] * errors[1]} if n > 1 else {}
    bounds = standard_error_bounds(list(c), list(errors), covariances)
    scaled = standard_error_bounds(list(-factor * c), list(errors), covariances)
    assert scaled.high == pytest.approx(factor * bounds.high, rel=1e-9)
    assert scaled.low == pytest.approx(factor * bounds.low, rel=1e-9, abs=1e-9 * factor * bounds.high)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(2, 5), st.sampled_from([1, 10, 30]))
def test_extreme_sizes_and_impossible_print_still_give_finite_bounds(seed, n, decades):
    rng = np.random.default_rng(seed)
    errors = (10.0 ** rng.uniform(-decades, decades, n)).tolist()
    c = (rng.normal(size=n) * 10.0 ** rng.uniform(-decades, decades, n)).tolist()
    pairs = [(i, j) for i in range(n) for j in range(i + 1, n) if rng.random() < 0.5]
    covariances = {pair: float(rng.normal() * 10.0 ** rng.uniform(-decades, decades)) for pair in pairs}
    other = tuple(rng.normal(size=n).tolist())
    size = float(10.0 ** rng.uniform(-decades, decades))
    bounds = standard_error_bounds(c, errors, covariances, known=KnownCombination(other, 0.9 * size, 1.1 * size))
    assert 0 <= bounds.low <= bounds.uncorrelated <= bounds.high < math.inf
    assert bounds.high <= math.fsum(abs(a * b) for a, b in zip(c, errors, strict=True)) * (1 + 1e-9)
    assert 0 <= bounds.shrinkage <= 1
    assert {type(bounds.low), type(bounds.high), type(bounds.uncorrelated), type(bounds.shrinkage)} == {float}
    assert type(bounds.known_combination_used) is bool


def test_covariances_beyond_their_errors_are_shrunk_and_say_so():
    # Two terms with a correlation of 1.25: the largest possible share is 1/1.25.
    two = standard_error_bounds((1.0, 1.0), (1.0, 1.0), {(0, 1): 1.25})
    assert two.shrinkage == pytest.approx(0.8, rel=1e-12)
    # A path of correlations .9 and -.9 with an impossible third of .9: det = 1 - 3 s^2 .81 - 2 s^3 .729 = 0 at
    # s = 1/1.8.
    three = {(0, 1): 0.9, (1, 2): -0.9, (0, 2): 0.9}
    assert standard_error_bounds((1.0, 1.0, 1.0), (1.0,) * 3, three).shrinkage == pytest.approx(1 / 1.8, rel=1e-9)
    # A cycle of four with angles of acos .95 three times and -.95 once cannot close; its share closes it at
    # cos(pi/4): three equal angles add up to the supplement of the fourth.
    cycle = {(0, 1): 0.95, (1, 2): 0.95, (2, 3): 0.95, (0, 3): -0.95}
    found = standard_error_bounds((1.0,) * 4, (1.0,) * 4, cycle)
    assert found.shrinkage == pytest.approx(math.cos(math.pi / 4) / 0.95, rel=1e-6)


def test_a_term_known_only_from_above_can_balance_the_others():
    firm = standard_error_bounds((1.0, 1.0), (3.0, 1.0))
    loose = standard_error_bounds((1.0, 1.0), (3.0, 1.0), upper_only=(True, False))
    assert (firm.low, firm.high) == (2.0, 4.0)
    assert (loose.low, loose.high) == (0.0, 4.0)
    assert standard_error_bounds((1.0,), (3.0,), upper_only=(True,)).low == 0.0


def test_impossible_input_is_refused():
    with pytest.raises(InvalidInput, match="one for each standard error"):
        standard_error_bounds((1.0, 2.0), (1.0,))
    with pytest.raises(InvalidInput, match="above zero"):
        standard_error_bounds((1.0,), (0.0,))
    with pytest.raises(InvalidInput, match="not a pair"):
        standard_error_bounds((1.0, 2.0), (1.0, 1.0), {(0, 2): 0.1})
    with pytest.raises(InvalidInput, match="must be finite"):
        standard_error_bounds((math.nan,), (1.0,))


# --- derivatives and scales ------------------------------------------------------------------------------------


@given(st.floats(0.1, 50), st.floats(-20, 20))
def test_term_derivatives_are_numerical_derivatives(x, w):
    terms = {
        "linear": lambda v: v,
        "square": lambda v: v**2,
        "cube": lambda v: v**3,
        "logarithm": math.log,
        "interaction": lambda v: v * w,
    }
    step = 1e-5 * max(1.0, x)
    for form, term in terms.items():
        numerical = (term(x + step) - term(x - step)) / (2 * step)
        assert term_derivative(form, exposure=x, moderator=w) == pytest.approx(numerical, rel=1e-5, abs=1e-6)


def test_a_derivative_without_its_value_is_refused():
    with pytest.raises(InvalidInput, match="exposure"):
        term_derivative("square")
    with pytest.raises(InvalidInput, match="moderator"):
        term_derivative("interaction", exposure=1.0)
    with pytest.raises(InvalidInput, match="above zero"):
        term_derivative("logarithm", exposure=-1.0)
    with pytest.raises(UnknownChoice, match="linear"):
        term_derivative("quartic", exposure=1.0)


def test_scales_at_means_by_plain_arithmetic():
    # Common practice, no source: b .5 (SE .1), means 4 and 20, deviations 3 and 6.
    at_means = elasticity(0.5, 0.01, 4.0, 20.0)
    assert (at_means.value, at_means.standard_error) == pytest.approx((0.1, 0.02), rel=1e-12)
    relative = semi_elasticity(0.5, 0.01, 20.0)
    assert (relative.value, relative.standard_error) == pytest.approx((0.025, 0.005), rel=1e-12)
    standardised = standardised_coefficient(0.5, 0.01, 3.0, 6.0)
    assert (standardised.value, standardised.standard_error) == pytest.approx((0.25, 0.05), rel=1e-12)


@given(st.floats(0.1, 5), st.floats(1, 50), st.floats(1e-4, 1), st.floats(1e-4, 1))
def test_the_outcome_mean_propagates_as_the_delta_method_says(slope, mean, variance, mean_variance):
    # Numerical gradient of b/y in (b, y), variances independent.
    step = 1e-6
    by_slope = ((slope + step) / mean - (slope - step) / mean) / (2 * step)
    by_mean = (slope / (mean + step) - slope / (mean - step)) / (2 * step)
    effect = scaled_slope(slope, variance, 1.0, outcome_mean=mean, outcome_mean_variance=mean_variance)
    assert effect.variance == pytest.approx(by_slope**2 * variance + by_mean**2 * mean_variance, rel=1e-5)
