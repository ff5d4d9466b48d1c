"""Repeated looks: published constants, a table of spending boundaries, multivariate normal integrals and simulation."""

import itertools
import math

import numpy as np
import pytest
import scipy.integrate
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, NotEstimable, UnknownChoice
from analysis.methods.spending import (
    SPENDING,
    classical_boundaries,
    crossing_probabilities,
    cumulative_alpha,
    drift_for_power,
    futility_boundaries,
    monitor,
    spending_boundaries,
)
from tests.analysis.methods.check_data import rows
from tests.analysis.methods.strategies import assert_sound

Z = 1.959963984540054
EQUAL, UNEQUAL = (0.2, 0.4, 0.6, 0.8, 1.0), (0.2, 0.5, 0.6, 0.9, 1.0)
NAMES = {"obrien-fleming-type, undoubled variant": "obrien-fleming-type-undoubled"}
GROUPS = [list(group) for _, group in itertools.groupby(rows("spending_bounds"), lambda r: (r["spending"], r["looks"]))]


# Armitage, McPherson & Rowe 1969: .050, .083, .107, .126, .142, .193, .248, .320, .374, .424, .530 (the .142, .374 and
# .530 quoted in Lakens, Improving Your Statistical Inferences, chapter on sequential analysis; the others from memory);
# further digits by recursive Gauss-Legendre integration outside this project.
@pytest.mark.parametrize(
    ("looks", "level", "printed"),
    [
        (1, 0.05, "0.050"),
        (2, 0.0831178034, "0.083"),
        (3, 0.1072563746, "0.107"),
        (4, 0.1261690125, "0.126"),
        (5, 0.1416893326, "0.142"),
        (10, 0.1933565933, "0.193"),
        (20, 0.2479109386, "0.248"),
        (50, 0.3204500039, "0.320"),
        (100, 0.3736187390, "0.374"),
        (200, 0.4242708983, "0.424"),
        (1000, 0.5299113847, "0.530"),
    ],
)
def test_armitage_mcpherson_and_rowe_1969_repeated_tests(looks, level, printed):
    found = 2 * crossing_probabilities(np.arange(1, looks + 1) / looks, np.full(looks, Z))[-1]
    assert found == pytest.approx(level, abs=1e-9)
    assert f"{found:.3f}" == printed


# Pocock 1977 prints the nominal levels .0294, .0221, .0182, .0158 for 2 to 5 looks and the constant 2.413 for 5;
# O'Brien & Fleming 1979 and Jennison & Turnbull 2000, table 2.3 (from memory): 1.977, 2.004, 2.024, 2.040, 2.087.
CLASSICAL = [
    (2, 2.1782720887, 0.02938579, "0.0294", 1.9774309593, "1.977", 1.967294235),
    (3, 2.2894780610, 0.02205159, "0.0221", 2.0040355786, "2.004", 1.975097600),
    (4, 2.3612978911, 0.01821110, "0.0182", 2.0242954996, "2.024", 1.982750962),
    (5, 2.4131762201, 0.01581417, "0.0158", 2.0400731748, "2.040", 1.990046199),
    (10, 2.5550127703, 0.01061839, "0.0106", 2.0865021806, "2.087", 2.021247928),
]


@pytest.mark.parametrize(("looks", "pocock", "nominal", "level", "last", "printed", "haybittle"), CLASSICAL)
def test_pocock_1977_obrien_and_fleming_1979_haybittle_1971(looks, pocock, nominal, level, last, printed, haybittle):
    constant = classical_boundaries("pocock", looks)
    assert constant.bounds == pytest.approx(np.full(looks, pocock), abs=1e-9)
    assert constant.nominal_p[0] == pytest.approx(nominal, abs=5e-9)
    assert f"{constant.nominal_p[0]:.4f}" == level
    falling = classical_boundaries("obrien-fleming", looks)
    assert falling.bounds[-1] == pytest.approx(last, abs=1e-9)
    assert f"{falling.bounds[-1]:.3f}" == printed
    interim = classical_boundaries("haybittle-peto", looks)
    assert interim.bounds[:-1].tolist() == [3.0] * (looks - 1)
    assert interim.bounds[-1] == pytest.approx(haybittle, abs=1e-9)


def test_obrien_and_fleming_1979_five_looks():
    bounds = classical_boundaries("obrien-fleming", 5).bounds
    assert bounds == pytest.approx([4.561742, 3.225639, 2.633723, 2.280871, 2.040073], abs=1e-6)
    # Printed (from memory).
    assert [f"{z:.2f}" for z in bounds] == ["4.56", "3.23", "2.63", "2.28", "2.04"]


def test_a_single_look_is_the_plain_test():
    for name in ("pocock", "obrien-fleming", "haybittle-peto"):
        assert classical_boundaries(name, 1).bounds.tolist() == pytest.approx([Z], rel=1e-12)


@pytest.mark.parametrize("group", GROUPS, ids=lambda g: f"{g[0]['spending']}-{g[0]['looks']}")
def test_lan_and_demets_1983_boundaries_agree_with_the_table(group):
    # The table's second route is R's mvtnorm; it is printed to twelve digits.
    name = group[0]["spending"]
    found = spending_boundaries([float(row["fraction"]) for row in group], spending=NAMES.get(name, name))
    assert found.alpha_spent == pytest.approx([float(row["cumulative_alpha"]) for row in group], rel=1e-9)
    assert found.bounds == pytest.approx([float(row["z_bound"]) for row in group], abs=1e-9)
    assert found.nominal_p == pytest.approx([float(row["nominal_p_two_sided"]) for row in group], rel=1e-8)
    np.testing.assert_allclose(found.crossing, found.alpha_spent, rtol=1e-9)


def test_lan_and_demets_1983_print_five_looks():
    # Lan & DeMets 1983; DeMets & Lan 1994 (from memory).
    printed = {
        "obrien-fleming-type": ["4.877", "3.357", "2.680", "2.290", "2.031"],
        "pocock-type": ["2.438", "2.427", "2.410", "2.397", "2.386"],
    }
    for name, expected in printed.items():
        assert [f"{z:.3f}" for z in spending_boundaries(EQUAL, spending=name).bounds] == expected


@pytest.mark.parametrize(
    ("fractions", "spending", "power", "drift", "inflation"),
    [
        (EQUAL, "obrien-fleming-type", 0.8, 2.8360012501, 1.0247198789),
        (EQUAL, "obrien-fleming-type", 0.9, 3.2787065739, 1.0230783262),
        (UNEQUAL, "obrien-fleming-type", 0.8, 2.8416748790, 1.0288240349),
        (UNEQUAL, "obrien-fleming-type", 0.9, 3.2853870445, 1.0272516838),
        (EQUAL, "pocock-type", 0.8, 3.0850859316, 1.2126259450),
        (EQUAL, "pocock-type", 0.9, 3.5395622860, 1.1923476483),
    ],
)
def test_drift_and_inflation(fractions, spending, power, drift, inflation):
    # Recursive integration outside this project, ten decimals.
    bounds = spending_boundaries(fractions, spending=spending).bounds
    found = drift_for_power(fractions, bounds, power)
    assert found == pytest.approx(drift, abs=1e-9)
    assert (found / (Z + scipy.stats.norm.ppf(power))) ** 2 == pytest.approx(inflation, abs=1e-9)


# --- slowly and independently -----------------------------------------------------------------------------------------


def inside_probability(t, bounds, drift=0.0):
    """Chance that every z stays inside its bounds, as one multivariate normal integral."""
    t, bounds = np.asarray(t), np.asarray(bounds)
    correlation = np.sqrt(np.minimum.outer(t, t) / np.maximum.outer(t, t))
    normal = scipy.stats.multivariate_normal(
        drift * np.sqrt(t), correlation, abseps=1e-9, releps=1e-9, maxpts=4_000_000
    )
    return normal.cdf(bounds, lower_limit=-bounds, rng=np.random.default_rng(1))


@pytest.mark.parametrize("spending", SPENDING)
def test_spending_by_the_multivariate_normal_integral(spending):
    t = np.array([0.3, 0.55, 1.0])
    plan = spending_boundaries(t, spending=spending)
    for look in (2, 3):
        outside = 1 - inside_probability(t[:look], plan.bounds[:look])
        assert outside == pytest.approx(plan.alpha_spent[look - 1], abs=2e-8)


def test_the_wedge_by_the_multivariate_normal_integral():
    # Two looks: stop for futility at the first with chance β(t₁), and within both bounds at the last; total β.
    t = np.array([0.5, 1.0])
    plan = spending_boundaries(t, spending="pocock-type")
    wedge = futility_boundaries(plan, beta=0.2, spending="linear")
    a, c, drift = wedge.bounds, plan.bounds, wedge.drift
    mean = drift * np.sqrt(0.5)
    first = scipy.stats.norm.cdf(a[0] - mean) - scipy.stats.norm.cdf(-a[0] - mean)
    assert first == pytest.approx(wedge.beta_spent[0], rel=1e-9)
    assert wedge.beta_spent[0] == pytest.approx(0.1, rel=1e-12)

    def last_inside(z):
        increment = (c[1] - z * math.sqrt(0.5)) / math.sqrt(0.5) - drift * math.sqrt(0.5)
        decrement = (-c[1] - z * math.sqrt(0.5)) / math.sqrt(0.5) - drift * math.sqrt(0.5)
        chance = scipy.stats.norm.cdf(increment) - scipy.stats.norm.cdf(decrement)
        return scipy.stats.norm.pdf(z - mean) * chance

    total = first + sum(scipy.integrate.quad(last_inside, low, high)[0] for low, high in ((-c[0], -a[0]), (a[0], c[0])))
    assert total == pytest.approx(0.2, rel=1e-9)
    assert a[1] == c[1]


def test_the_wedge_by_simulation():
    # 400,000 paths of the whole plan: four standard errors of a chance of 0.2 are 0.0026.
    t = np.array(UNEQUAL)
    wedge = futility_boundaries(spending_boundaries(t), beta=0.2)
    rng = np.random.default_rng(4)
    steps = np.diff(t, prepend=0.0)

    def walk(drift):
        """Shares of paths that stop inside the wedge at each look, and that ever cross the outer bound."""
        z = np.cumsum(rng.normal(drift * steps, np.sqrt(steps), (400_000, t.size)), axis=1) / np.sqrt(t)
        alive = np.ones(z.shape[0], dtype=bool)
        futile, crossed = np.zeros(t.size), 0.0
        for look in range(t.size):
            size = np.abs(z[:, look])
            inside, outside = size < wedge.bounds[look], size >= wedge.outer.bounds[look]
            futile[look] = (alive & inside).mean()
            crossed += (alive & outside).mean()
            alive &= ~inside & ~outside
        return np.cumsum(futile), crossed

    futile, _ = walk(wedge.drift)
    assert futile == pytest.approx(wedge.beta_spent, abs=0.0026)
    # Not binding: stopping for futility can only lower the error rate. Four standard errors of 0.05 are 0.0014.
    assert walk(0.0)[1] <= 0.0514


def test_the_wedge_costs_information():
    plan = spending_boundaries(EQUAL)
    wedge = futility_boundaries(plan, beta=0.1)
    assert wedge.drift > drift_for_power(EQUAL, plan.bounds, 0.9)
    assert wedge.inflation > 1.0
    assert (np.diff(wedge.bounds) > 0).all()
    assert (wedge.bounds[:-1] < plan.bounds[:-1]).all()


# --- what must hold for any plan --------------------------------------------------------------------------------------

plans = st.lists(st.floats(0.01, 1.0), min_size=1, max_size=6, unique_by=lambda x: round(x, 3)).map(sorted)


@given(fractions=plans, spending=st.sampled_from(SPENDING), alpha=st.sampled_from([0.001, 0.05, 0.2]))
@settings(max_examples=60, deadline=None)
def test_a_plan_spends_what_it_says_and_keeps_its_earlier_bounds(fractions, spending, alpha):
    plan = spending_boundaries(fractions, spending=spending, alpha=alpha)
    finite = np.isfinite(plan.bounds)
    assert_sound(plan, infinite=("bounds",))
    if finite.all():
        np.testing.assert_allclose(plan.crossing, plan.alpha_spent, rtol=1e-8)
    crossed = 2 * crossing_probabilities(fractions, plan.bounds)
    np.testing.assert_allclose(crossed, plan.crossing, rtol=1e-9, atol=1e-300)
    # Common practice, no source: a later look does not move an earlier bound; all of α is spent at 1.
    shorter = spending_boundaries(fractions[:1], spending=spending, alpha=alpha)
    assert shorter.bounds[0] == plan.bounds[0]
    whole = spending_boundaries([*[f for f in fractions if f < 0.999], 1.0], spending=spending, alpha=alpha)
    assert whole.crossing[-1] == pytest.approx(alpha, rel=1e-8)


@given(fractions=plans, drift=st.floats(-4, 4))
@settings(max_examples=40, deadline=None)
def test_crossing_rises_with_drift_and_looks(fractions, drift):
    bounds = np.linspace(2.5, 1.5, len(fractions))
    crossed = crossing_probabilities(fractions, bounds, drift=drift)
    assert (np.diff(crossed) >= 0).all()
    assert crossed[-1] <= 1 + 1e-12
    assert crossing_probabilities(fractions, bounds, drift=drift + 0.5)[-1] > crossed[-1]


def test_very_early_looks_have_bounds_no_data_could_reach():
    plan = spending_boundaries([1e-6, 0.002, 0.01, 0.5, 1.0])
    assert math.isinf(plan.bounds[0])
    assert math.isinf(plan.bounds[1])
    # The first look that can spend: its two-sided level is 4(1 − Φ(z_{α/4}/√t)) itself.
    assert plan.bounds[2] == pytest.approx(scipy.stats.norm.isf(2 * scipy.stats.norm.sf(22.41402728)), rel=1e-7)
    assert plan.crossing[-1] == pytest.approx(0.05, rel=1e-9)


def test_looks_close_together_are_told_apart():
    # A tenth of a millionth of information between looks: the second can spend next to nothing.
    plan = spending_boundaries([0.5, 0.5 + 1e-6, 1.0])
    assert plan.crossing[-1] == pytest.approx(0.05, rel=1e-8)
    assert plan.bounds[1] > plan.bounds[0]


# --- a trail against its boundary -------------------------------------------------------------------------------------


def test_a_trail_is_held_against_its_boundary():
    # Required information 100; steps with 20, 40, 40 (no growth), 60, 120 (beyond), 150 (after the last look).
    information = np.array([20.0, 40.0, 40.0, 60.0, 120.0, 150.0])
    z = np.array([2.0, 2.5, 4.0, 2.8, 1.0, 9.0])
    se = 1 / np.sqrt(information)
    found = monitor(z * se, se, 100.0)
    plan = spending_boundaries([0.2, 0.4, 0.6, 1.0])
    assert [look.bound for look in found.looks] == [
        pytest.approx(plan.bounds[0]), pytest.approx(plan.bounds[1]), None,
        pytest.approx(plan.bounds[2]), pytest.approx(plan.bounds[3]), None,
    ]  # fmt: skip
    assert [look.finding for look in found.looks] == ["open", "open", "not-a-look", "above", "open", "not-a-look"]
    assert found.first_crossing == 3
    assert found.reached
    mirrored = monitor(-z * se, se, 100.0)
    assert mirrored.looks[3].finding == "below"


def test_a_wedge_can_say_that_the_effect_is_not_there():
    information = np.array([20.0, 50.0, 90.0])
    se = 1 / np.sqrt(information)
    found = monitor(np.array([0.1, 0.1, 0.05]) * se, se, 100.0, beta=0.2)
    assert [look.finding for look in found.looks][1:] == ["futile", "futile"]
    assert found.first_crossing is None
    assert not found.reached
    planned = futility_boundaries(spending_boundaries([0.2, 0.5, 0.9, 1.0]), beta=0.2)
    assert [look.futility_bound for look in found.looks] == pytest.approx(planned.bounds[:3])


@given(
    values=st.lists(st.sampled_from([-1e6, -0.3, 0.0, 0.2, 5.0]), min_size=0, max_size=5),
    required=st.sampled_from([1e-12, 0.5, 50.0, 1e12]),
    beta=st.sampled_from([None, 0.2]),
    data=st.data(),
)
@settings(max_examples=60, deadline=None)
def test_awkward_trails_never_give_nan(values, required, beta, data):
    errors = data.draw(
        st.lists(st.sampled_from([1e-6, 0.1, 0.2, 1.0, 1e6]), min_size=len(values), max_size=len(values))
    )
    found = monitor(values, errors, required, beta=beta)
    assert_sound(found, infinite=("bound",))
    assert isinstance(found, NotEstimable) == (not values)


def test_what_cannot_be_is_refused():
    with pytest.raises(InvalidInput, match=r"fractions\[1\].*rise"):
        spending_boundaries([0.5, 0.5])
    with pytest.raises(InvalidInput, match="exceed 1"):
        spending_boundaries([0.5, 1.5])
    with pytest.raises(InvalidInput, match="between 1 and"):
        spending_boundaries([])
    with pytest.raises(UnknownChoice, match="pocock-type"):
        spending_boundaries([1.0], spending="quadratic")
    with pytest.raises(InvalidInput, match="alpha"):
        spending_boundaries([1.0], alpha=0.0)
    with pytest.raises(InvalidInput, match="bounds"):
        crossing_probabilities([0.5, 1.0], [2.0])
    with pytest.raises(InvalidInput, match="looks"):
        classical_boundaries("pocock", 0)
    with pytest.raises(InvalidInput, match="exceeded"):
        classical_boundaries("haybittle-peto", 50, alpha=0.001)
    with pytest.raises(InvalidInput, match="required_information"):
        monitor([0.1], [0.1], 0.0)
    with pytest.raises(InvalidInput, match="positive"):
        cumulative_alpha("linear", [0.0])
    assert cumulative_alpha("linear", [0.5, 3.0]).tolist() == [0.025, 0.05]
    assert isinstance(drift_for_power([1.0], [math.inf]), NotEstimable)
    assert isinstance(futility_boundaries(spending_boundaries([0.5])), NotEstimable)
