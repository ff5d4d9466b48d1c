"""Printed numbers that cannot all be right are found, and ones that can be right never are.

Numbers made from one true estimate and error, then rounded as a paper would, must pass; SciPy's linear
programming, an independent route, says when no such pair exists.
"""

import numpy as np
import pytest
import scipy.optimize
import scipy.stats
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from evidence.readings import DiscrepancyCode, check_consistency, read
from tests.evidence.readings.samples import KINDS, sample


def ready_made(**items):
    return read({"kind": "ready-made-effect", "metric": "raw-coefficient", "scale": "as-is"} | items)


def codes(reading):
    return [(found.code, found.pointer) for found in check_consistency(reading)]


@pytest.mark.parametrize("kind", KINDS)
def test_a_plain_reading_of_each_kind_has_no_discrepancy(kind):
    assert check_consistency(read(sample(kind))) == ()


@pytest.mark.parametrize(
    ("items", "expected"),
    [
        # 0.12 / 0.05 lies between 2.30 and 2.55 after rounding.
        (
            {"estimate": "0.120", "standard_error": "0.050", "t": "1.2"},
            [(DiscrepancyCode.STANDARD_ERROR_DISAGREES, "/t")],
        ),
        # t = 2.4 leaves p of at least .0141, and more with few degrees of freedom; .001 is impossible.
        ({"estimate": "0.120", "t": "2.4", "p": "0.001"}, [(DiscrepancyCode.P_VALUE_DISAGREES, "/p")]),
        # p = .05 with 400 degrees of freedom needs t of 1.96.
        (
            {"estimate": "0.120", "t": "2.4", "p": "0.050", "degrees_of_freedom": 400},
            [(DiscrepancyCode.P_VALUE_DISAGREES, "/p")],
        ),
        # t = 1.5 is not below .05 under any degrees of freedom.
        ({"estimate": "0.15", "t": "1.50", "p_below": "0.05"}, [(DiscrepancyCode.P_VALUE_DISAGREES, "/p_below")]),
        (
            {"estimate": "0.12", "interval": {"level": "0.95", "low": "0.02", "high": "0.42"}},
            [(DiscrepancyCode.INTERVAL_NOT_CENTRED, "/interval")],
        ),
        ({"estimate": "0.12", "t": "-2.4"}, [(DiscrepancyCode.SIGN_DISAGREES, "/t")]),
        (
            {
                "estimate": "0.120",
                "standard_error": "0.050",
                "interval": {"level": "0.95", "low": "0.090", "high": "0.150"},
            },
            [(DiscrepancyCode.STANDARD_ERROR_DISAGREES, "/interval")],
        ),
        ({"estimate": "0.120", "t": "2.4", "f": "9.00"}, [(DiscrepancyCode.TEST_STATISTIC_DISAGREES, "/f")]),
        (
            {"estimate": "0.120", "degrees_of_freedom": 500, "observations": 400},
            [(DiscrepancyCode.DEGREES_OF_FREEDOM_EXCEED_OBSERVATIONS, "/degrees_of_freedom")],
        ),
    ],
)
def test_impossible_pairs_are_named(items, expected):
    assert codes(ready_made(**items)) == expected


@pytest.mark.parametrize(
    "items",
    [
        # Absolute t statistics are common in print.
        {"estimate": "-0.12", "t": "2.4"},
        # p = .03 with t = 2.4: twelve or so degrees of freedom, which nothing printed excludes.
        {"estimate": "0.120", "t": "2.4", "p": "0.03"},
        # 0.0 and 0.0: everything is within rounding of zero.
        {"estimate": "0.0", "t": "1.9"},
        {"estimate": "0.05", "standard_error": "0.02", "t": "3.4"},
    ],
)
def test_what_rounding_or_reporting_explains_is_not_a_discrepancy(items):
    assert codes(ready_made(**items)) == []


def test_a_ratio_is_centred_on_its_logarithm():
    data = {
        "kind": "ready-made-effect",
        "metric": "log-risk-ratio",
        "scale": "ratio",
        "estimate": "0.73",
        "interval": {"level": "0.95", "low": "0.53", "high": "1.01"},
    }
    assert codes(read(data)) == []
    off = data | {"interval": {"level": "0.95", "low": "0.53", "high": "1.51"}}
    assert codes(read(off)) == [(DiscrepancyCode.INTERVAL_NOT_CENTRED, "/interval")]


def test_three_numbers_can_be_impossible_although_each_pair_is_possible():
    # By hand: the interval puts the estimate between 2.35 and 2.45 and its error above 0.535; the printed error
    # keeps that below 0.55; so t is at least 2.35 / 0.55 = 4.27, which does not round to 4.2. Without any one of
    # the three it can.
    items = {
        "estimate": "2",
        "standard_error": "0.5",
        "t": "4.2",
        "interval": {"level": "0.95", "low": "1.3", "high": "3.5"},
        "degrees_of_freedom": 1000,
    }
    assert codes(ready_made(**items)) == [(DiscrepancyCode.JOINTLY_IMPOSSIBLE, "/standard_error")]
    assert not possible_on_a_grid(ready_made(**items))
    for key in ("standard_error", "t", "interval"):
        fewer = {name: value for name, value in items.items() if name != key}
        assert codes(ready_made(**fewer)) == []


def test_a_regression_is_checked_term_by_term_with_residual_or_cluster_degrees_of_freedom():
    data = sample("regression")
    data["terms"][0] = {"form": "linear", "coefficient": "0.052", "standard_error": "0.018", "t": "1.2"}
    assert codes(read(data)) == [(DiscrepancyCode.STANDARD_ERROR_DISAGREES, "/terms/0/t")]
    # t = 2.00 gives p = .0456 (normal), .0457 (1228) and .0500 (60 = clusters - 1): all pass, .060 does not.
    for p, expected in (
        ("0.046", []),
        ("0.050", []),
        ("0.060", [(DiscrepancyCode.P_VALUE_DISAGREES, "/terms/0/p")]),
    ):
        data["terms"][0] = {"form": "linear", "coefficient": "0.0520", "t": "2.00", "p": p}
        assert codes(read(data)) == expected, p


def test_a_covariance_beyond_its_standard_errors_is_noticed():
    data = sample("regression", covariances=[{"between": ["linear", "square"], "value": "-0.04"}])
    assert codes(read(data)) == [(DiscrepancyCode.COVARIANCE_EXCEEDS_STANDARD_ERRORS, "/covariances/0/value")]


def test_a_marginal_effect_that_the_coefficients_do_not_give_is_noticed():
    # 0.052 - 2 * 2.1 * 0.0061 - 3.2 * 0.004 = 0.01358 by hand.
    fine = sample("regression", marginal_effect={"estimate": "0.0136"})
    assert codes(read(fine)) == []
    off = sample("regression", marginal_effect={"estimate": "0.052", "t": "2.9"})
    assert codes(read(off)) == [(DiscrepancyCode.MARGINAL_EFFECT_DISAGREES, "/marginal_effect/estimate")]


def test_counts_that_do_not_fit_are_noticed():
    data = sample("regression", observations=1229, clusters=2000)
    assert codes(read(data)) == [
        (DiscrepancyCode.DEGREES_OF_FREEDOM_EXCEED_OBSERVATIONS, "/residual_degrees_of_freedom"),
        (DiscrepancyCode.CLUSTERS_EXCEED_OBSERVATIONS, "/clusters"),
    ]


def test_a_discrepancy_says_what_to_check():
    (found,) = check_consistency(ready_made(estimate="0.120", standard_error="0.050", t="1.2"))
    assert "the standard error 0.050 and t = 1.2 cannot both be right" in found.detail
    assert "Check both" in found.detail


# --- twins
# ---------------------------------------------------------------------------------------------------------


def possible_on_a_grid(reading, points=1500):
    """Whether any of a fine grid of true (estimate, error) pairs rounds to the printed error, t and interval."""
    precision = reading.precision
    distribution = scipy.stats.t(precision.degrees_of_freedom)
    b = np.linspace(float(reading.estimate.low), float(reading.estimate.high), 301)[:, np.newaxis]
    se = np.linspace(float(precision.standard_error.low), float(precision.standard_error.high), points)[np.newaxis, :]
    half = float(distribution.isf(float(1 - precision.interval.level.value) / 2)) * se

    def within(values, number):
        return (values >= float(number.low)) & (values <= float(number.high))

    fine = within(b / se, precision.t)
    fine &= within(b - half, precision.interval.low) & within(b + half, precision.interval.high)
    return bool(fine.any())


def possible_by_linear_programming(reading):
    """Whether some (b, se) rounds to a positive estimate, its error, its t and its p: a linear program in two
    unknowns."""
    precision = reading.precision
    distribution = scipy.stats.t(precision.degrees_of_freedom)
    wedges = [(float(precision.t.low), float(precision.t.high))]
    if precision.p is not None:
        wedges.append(tuple(float(distribution.isf(float(end) / 2)) for end in (precision.p.high, precision.p.low)))
    rows = [row for low, high in wedges for row in ([-1.0, low], [1.0, -high])]
    bounds = [
        (float(reading.estimate.low), float(reading.estimate.high)),
        (float(precision.standard_error.low), float(precision.standard_error.high)),
    ]
    return scipy.optimize.linprog([0, 0], A_ub=rows, b_ub=[0.0] * len(rows), bounds=bounds).status == 0


def rounded(value, places):
    return f"{value:.{places}f}"


@settings(max_examples=150, deadline=None)
@given(
    st.floats(-5, 5),
    st.floats(0.02, 3),
    st.integers(1, 4),
    st.one_of(st.none(), st.integers(3, 500)),
    st.sets(st.sampled_from(["standard_error", "t", "z", "f", "p", "interval"]), min_size=1),
)
def test_numbers_rounded_from_one_truth_are_never_a_discrepancy(estimate, error, places, degrees, keys):
    distribution = scipy.stats.norm if degrees is None else scipy.stats.t(degrees)
    t = estimate / error
    half = float(distribution.isf(0.025)) * error
    items = {
        "standard_error": rounded(error, places),
        "t": rounded(t, places),
        "z": rounded(t, places),
        "f": rounded(t * t, places),
        "p": rounded(2 * float(distribution.sf(abs(t))), places),
        "interval": {
            "level": "0.95",
            "low": rounded(estimate - half, places),
            "high": rounded(estimate + half, places),
        },
    }
    # What a paper cannot print usefully is refused elsewhere.
    assume(float(items["standard_error"]) > 0 and items["interval"]["low"] != items["interval"]["high"])
    assume(degrees is None or "z" not in keys)
    data = {"estimate": rounded(estimate, places)} | {key: items[key] for key in sorted(keys)}
    if degrees is not None:
        data["degrees_of_freedom"] = degrees
    assert codes(ready_made(**data)) == []


@settings(max_examples=150, deadline=None)
@given(
    st.decimals("0.5", "5", places=1),
    st.decimals("0.1", "2", places=1),
    st.decimals("0.5", "9", places=1),
    st.integers(2, 500),
    st.one_of(st.none(), st.decimals("0.01", "0.99", places=2)),
)
def test_linear_programming_finds_the_same_readings_possible(b, error, t, degrees, p):
    items = {"estimate": str(b), "standard_error": str(error), "t": str(t), "degrees_of_freedom": degrees}
    if p is not None:
        items["p"] = str(p)
    reading = ready_made(**items)
    assert (check_consistency(reading) == ()) == possible_by_linear_programming(reading)
