"""A reading on the page: the coder's own digits, in plain words."""

import pytest

from dashboard.printed import as_printed, characteristics_in_words, place_in_words, short_place

REGRESSION = {
    "kind": "regression",
    "outcome": {"scale": "logarithm"},
    "exposure": {"scale": "level", "unit": "messages a week", "mean": "2.1", "standard_deviation": "1.30"},
    "terms": [
        {"form": "linear", "coefficient": "0.052", "standard_error": "0.018"},
        {"form": "square", "coefficient": "-0.0061", "standard_error": "0.0030"},
        {"form": "interaction", "with": "distance to market", "at": "3.2", "coefficient": "-0.004", "t": "-1.9"},
    ],
    "covariances": [{"between": ["linear", "interaction:distance to market"], "value": "-0.00010"}],
    "marginal_effect": {"estimate": "0.031", "t": "2.4"},
    "observations": 1240,
    "cluster": {"average_size": "29.8", "intraclass_correlation": "0.02", "accounted_for": False},
}


def test_the_terms_of_a_regression_stand_in_a_table_as_printed():
    printed = as_printed(REGRESSION)
    assert printed.headings == ("term", "coefficient", "standard error", "t")
    assert printed.lines == (
        ("the exposure", "0.052", "0.018", ""),
        ("its square", "-0.0061", "0.0030", ""),
        ("the exposure times distance to market (taken at 3.2)", "-0.004", "", "-1.9"),
    )


def test_everything_else_about_a_regression_is_said_too():
    facts = dict(as_printed(REGRESSION).facts)
    assert facts == {
        "outcome": "its logarithm",
        "exposure": "in its own units, unit messages a week, mean 2.1, standard deviation 1.30",
        "covariance of the exposure and the exposure times distance to market": "-0.00010",
        "marginal effect, as printed": "estimate 0.031; t 2.4",
        "observations": "1240",
        "assigned or sampled in clusters": (
            "average size of a cluster 29.8; intraclass correlation 0.02; not accounted for by the paper"
        ),
    }


def test_no_printed_covariance_is_itself_a_fact():
    assert dict(as_printed({**REGRESSION, "covariances": []}).facts)["covariances"] == "none printed"


@pytest.mark.parametrize(
    ("reading", "headings", "lines"),
    [
        (
            {
                "kind": "two-proportions",
                "treated": {"events": 4, "total": 123},
                "control": {"events": 11, "total": 139},
            },
            ("group", "events", "of"),
            (("treated", "4", "123"), ("control", "11", "139")),
        ),
        (
            {
                "kind": "two-means",
                "treated": {"mean": "12.10", "standard_deviation": "3.0", "observations": 40},
                "control": {"mean": "11.0", "standard_deviation": "2.95", "observations": 41},
            },
            ("group", "mean", "standard deviation", "observations"),
            (("treated", "12.10", "3.0", "40"), ("control", "11.0", "2.95", "41")),
        ),
    ],
)
def test_two_groups_stand_under_one_another(reading, headings, lines):
    printed = as_printed(reading)
    assert (printed.headings, printed.lines, printed.facts) == (headings, lines, ())


def test_a_ready_made_effect_keeps_its_digits_and_its_interval():
    printed = as_printed(
        {
            "kind": "ready-made-effect",
            "metric": "log-risk-ratio",
            "scale": "ratio",
            "estimate": "0.50",
            "interval": {"level": "0.95", "low": "0.30", "high": "0.83"},
            "p_below": "0.01",
        }
    )
    assert printed.kind == "An effect printed by the paper itself"
    assert dict(printed.facts) == {
        "printed as": "a ratio",
        "metric": "log-risk-ratio",
        "estimate": "0.50",
        "interval": "0.30 to 0.83 (level 0.95)",
        "p below": "0.01",
    }


def test_a_place_is_said_in_full_and_in_short():
    locator = {"page": "14", "table": "3", "column": "2", "row": "Messages"}
    assert place_in_words(locator) == "page 14, table 3, column 2, row Messages"
    assert short_place(locator) == "Messages, table 3, column 2"
    assert short_place({"page": "14", "table": "", "column": "", "row": ""}) == "page 14"


def test_characteristics_read_as_words():
    assert characteristics_in_words({"controls-for-rainfall": True, "region": "coast", "rounds": 3}) == [
        ("controls for rainfall", "yes"),
        ("region", "coast"),
        ("rounds", "3"),
    ]
