"""Readings come back as they went in, and impossible ones are refused with a pointer and a remedy.

Pointers are RFC 6901. What is impossible in print is common practice, no source, unless marked.
"""

import json

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from evidence.readings import DiscrepancyCode, ErrorCode, Reading, ReadingErrors, check_consistency, read
from evidence.readings.errors import escape
from tests.evidence.readings.samples import KINDS, sample


def errors_of(data, **options):
    with pytest.raises(ReadingErrors) as refusal:
        read(data, **options)
    return [(error.pointer, error.code) for error in refusal.value.errors], refusal.value.errors


@pytest.mark.parametrize("kind", KINDS)
def test_a_reading_gives_back_what_was_printed(kind):
    data = sample(kind)
    reading = read(data)
    assert reading.kind == kind
    assert reading.as_json() == data
    assert json.loads(json.dumps(reading.as_json())) == data
    assert read(reading.as_json()) == reading


@pytest.mark.parametrize("kind", KINDS)
def test_every_unknown_field_is_refused_with_the_likely_spelling(kind):
    found, errors = errors_of(sample(kind, clustre={"accounted_for": True}))
    assert found == [("/clustre", ErrorCode.UNKNOWN_KEY)]
    assert "Did you mean 'cluster'?" in errors[0].detail


def test_the_interval_example_of_the_problem_details():
    # The sentence that the service's own examples promise for this mistake.
    data = sample("ready-made-effect", estimate="0.31", interval={"level": "0.95", "low": "0.02", "high": "0.19"})
    found, errors = errors_of(data, pointer="/estimates/0/reading")
    assert found == [("/estimates/0/reading/interval", ErrorCode.INTERVAL_EXCLUDES_ESTIMATE)]
    assert errors[0].detail == (
        "0.31 lies outside its own 95 % interval, 0.02 to 0.19. Check for a missing minus sign or a swapped column."
    )


def test_an_estimate_at_a_limit_within_rounding_is_not_refused():
    read(sample("ready-made-effect", estimate="0.2", interval={"level": "0.9", "low": "0.05", "high": "0.19"}))


INTERVAL = {"level": "0.95", "low": "0.022", "high": "0.218"}
REFUSED = [
    ("ready-made-effect", {"standard_error": "-0.05"}, "/standard_error", "standard-error-not-positive"),
    ("ready-made-effect", {"standard_error": "0.00"}, "/standard_error", "standard-error-not-positive"),
    ("ready-made-effect", {"standard_error": 0.05}, "/standard_error", "number-not-text"),
    ("ready-made-effect", {"p": "1.2"}, "/p", "p-outside-unit-interval"),
    ("ready-made-effect", {"p": "-0.1"}, "/p", "p-outside-unit-interval"),
    ("ready-made-effect", {"p_below": "0"}, "/p_below", "p-outside-unit-interval"),
    ("ready-made-effect", {"f": "-1"}, "/f", "f-negative"),
    ("ready-made-effect", {"metric": "odds"}, "/metric", "unknown-choice"),
    ("ready-made-effect", {"metric": ["x"]}, "/metric", "unknown-choice"),
    ("ready-made-effect", {"estimate": None}, "/estimate", "missing"),
    ("ready-made-effect", {"estimate": "1e400"}, "/estimate", "number-out-of-range"),
    ("ready-made-effect", {"degrees_of_freedom": 0}, "/degrees_of_freedom", "count-too-small"),
    ("ready-made-effect", {"degrees_of_freedom": "0.2"}, "/degrees_of_freedom", "degrees-of-freedom-too-small"),
    ("ready-made-effect", {"interval": INTERVAL | {"level": "95"}}, "/interval/level", "level-outside-unit-interval"),
    ("ready-made-effect", {"interval": INTERVAL | {"low": "0.3"}}, "/interval/low", "limits-swapped"),
    (
        "ready-made-effect",
        {"interval": INTERVAL | {"low": "0.12", "high": "0.12"}},
        "/interval/high",
        "interval-without-width",
    ),
    ("ready-made-effect", {"interval": {"low": "0", "high": "1"}}, "/interval/level", "missing"),
    ("ready-made-effect", {"interval": "0.02 to 0.2"}, "/interval", "not-an-object"),
    ("ready-made-effect", {"observations": 0}, "/observations", "count-too-small"),
    ("ready-made-effect", {"observations": 10**15}, "/observations", "count-too-large"),
    ("ready-made-effect", {"observations": "410"}, "/observations", "not-a-whole-number"),
    ("ready-made-effect", {"observations": True}, "/observations", "not-a-whole-number"),
    (
        "ready-made-effect",
        {"metric": "correlation", "estimate": "1.2", "interval": None},
        "/estimate",
        "correlation-outside-range",
    ),
    (
        "ready-made-effect",
        {"metric": "risk-difference", "estimate": "-3", "interval": None},
        "/estimate",
        "effect-outside-range",
    ),
    ("ready-made-effect", {"scale": "ratio", "standard_error": None}, "/scale", "ratio-metric"),
    ("ready-made-effect", {"scale": "ratio", "metric": "log-odds-ratio"}, "/standard_error", "ratio-standard-error"),
    (
        "ready-made-effect",
        {"scale": "ratio", "metric": "log-odds-ratio", "standard_error": None, "interval": INTERVAL | {"low": "-0.1"}},
        "/interval/low",
        "ratio-not-positive",
    ),
    ("two-proportions", {"treated": {"events": 5, "total": 4}}, "/treated/events", "events-exceed-total"),
    ("two-proportions", {"treated": {"events": -1, "total": 4}}, "/treated/events", "count-too-small"),
    ("two-proportions", {"treated": {"events": 0, "total": 0}}, "/treated/total", "count-too-small"),
    ("two-proportions", {"control": {"events": 1.5, "total": 4}}, "/control/events", "not-a-whole-number"),
    ("two-proportions", {"control": None}, "/control", "missing"),
    ("two-proportions", {"cluster": {"accounted_for": "no"}}, "/cluster/accounted_for", "not-true-or-false"),
    ("two-proportions", {"cluster": {}}, "/cluster/accounted_for", "missing"),
    (
        "two-proportions",
        {"cluster": {"average_size": "0.5", "accounted_for": False}},
        "/cluster/average_size",
        "cluster-size-too-small",
    ),
    (
        "two-proportions",
        {"cluster": {"intraclass_correlation": "1.5", "accounted_for": False}},
        "/cluster/intraclass_correlation",
        "intraclass-correlation-outside-range",
    ),
    (
        "two-means",
        {"treated": {"mean": "1", "standard_deviation": "-2", "observations": 5}},
        "/treated/standard_deviation",
        "standard-deviation-negative",
    ),
    ("two-means", {"control": {"mean": "1", "standard_deviation": "2"}}, "/control/observations", "missing"),
    ("correlation", {"correlation": "1.01"}, "/correlation", "correlation-outside-range"),
    ("regression", {"terms": []}, "/terms", "no-terms"),
    ("regression", {"terms": {}}, "/terms", "not-a-list"),
    ("regression", {"terms": ["x"], "covariances": None}, "/terms/0", "not-an-object"),
    ("regression", {"outcome": {"scale": "log"}}, "/outcome/scale", "unknown-choice"),
    ("regression", {"exposure": {"scale": "level", "unit": "\x00"}}, "/exposure/unit", "text-unprintable"),
    ("regression", {"exposure": {"scale": "level", "unit": " "}}, "/exposure/unit", "text-empty"),
    ("regression", {"exposure": {"scale": "level", "unit": "x" * 500}}, "/exposure/unit", "text-too-long"),
    ("regression", {"exposure": {"scale": "level", "unit": 3}}, "/exposure/unit", "not-text"),
    (
        "regression",
        {"covariances": [{"between": ["linear", "cube"], "value": "1"}]},
        "/covariances/0/between",
        "term-unknown",
    ),
    (
        "regression",
        {"covariances": [{"between": ["linear", "linear"], "value": "1"}]},
        "/covariances/0/between",
        "covariance-of-one-term",
    ),
    (
        "regression",
        {
            "covariances": [
                {"between": ["linear", "square"], "value": "1"},
                {"between": ["square", "linear"], "value": "1"},
            ]
        },
        "/covariances/1/between",
        "covariance-repeated",
    ),
    ("regression", {"covariances": [{"between": "linear", "value": "1"}]}, "/covariances/0/between", "not-a-list"),
]


@pytest.mark.parametrize(("kind", "changes", "pointer", "code"), REFUSED)
def test_what_cannot_have_been_printed_is_refused_where_it_stands(kind, changes, pointer, code):
    found, errors = errors_of(sample(kind, **changes))
    assert found == [(pointer, code)]
    assert errors[0].detail.endswith((".", "?"))


LINEAR = {"form": "linear", "coefficient": "1", "standard_error": "0.5"}


@pytest.mark.parametrize(
    ("terms", "exposure", "pointer", "code"),
    [
        ([LINEAR, LINEAR], {}, "/terms/1/form", "term-repeated"),
        ([LINEAR | {"form": "interaction"}], {}, "/terms/0/with", "missing"),
        ([LINEAR | {"with": "size"}], {}, "/terms/0/with", "moderator-misplaced"),
        ([LINEAR | {"at": "3"}], {}, "/terms/0/at", "moderator-misplaced"),
        ([LINEAR | {"form": "logarithm"}], {"scale": "logarithm"}, "/terms/0/form", "logarithm-twice"),
        ([LINEAR | {"form": "logarithm"}], {"mean": "0.0"}, "/terms/0/form", "mean-not-positive"),
        (
            [LINEAR | {"interval": {"level": "0.95", "low": "2.6", "high": "3.1"}}],
            {},
            "/terms/0/interval",
            "interval-excludes-estimate",
        ),
        ([LINEAR | {"form": "interaction", "with": f"m{i}"} for i in range(13)], {}, "/terms", "too-many-terms"),
    ],
)
def test_terms_that_make_no_regression_are_refused(terms, exposure, pointer, code):
    data = sample(
        "regression", terms=terms, exposure={"scale": "level"} | exposure, covariances=None, marginal_effect=None
    )
    found, _ = errors_of(data)
    assert found == [(pointer, code)]


@pytest.mark.parametrize("kind", [None, "survival", 7, ["regression"]])
def test_an_unknown_kind_names_the_five(kind):
    found, errors = errors_of({"kind": kind} if kind is not None else {})
    assert found == [("/kind", "missing" if kind is None else "unknown-kind")]
    assert all(name in errors[0].detail for name in KINDS)


@pytest.mark.parametrize("data", [None, [], "regression", 3])
def test_a_reading_is_an_object(data):
    found, _ = errors_of(data, pointer="/reading")
    assert found == [("/reading", "not-an-object")]


def test_everything_wrong_is_reported_at_once():
    data = sample("ready-made-effect", estimate="0.05*", standard_error="0", t=2.4, colour="red")
    found, _ = errors_of(data)
    assert {pointer for pointer, _ in found} == {"/colour", "/estimate", "/standard_error", "/t"}


def test_pointers_escape_as_rfc_6901_section_3_says():
    # RFC 6901, section 5: "/a~1b" points to the member "a/b", "/m~0n" to "m~n".
    assert escape("a/b") == "a~1b"
    assert escape("m~n") == "m~0n"
    found, _ = errors_of(sample("correlation") | {"a/b~c": 1})
    assert found == [("/a~1b~0c", "unknown-key")]


def test_null_means_not_printed():
    data = sample("correlation")
    assert read(data | {"cluster": None}) == read(data)


def test_fractional_degrees_of_freedom_are_kept_as_printed():
    data = sample("ready-made-effect", degrees_of_freedom="45.3")
    assert read(data).as_json() == data


def test_no_printed_covariances_and_not_said_are_told_apart():
    said, unsaid = sample("regression", covariances=[]), sample("regression", covariances=None)
    assert read(said).as_json()["covariances"] == []
    assert "covariances" not in read(unsaid).as_json()


def test_every_code_explains_itself_in_a_sentence():
    for vocabulary in (ErrorCode, DiscrepancyCode):
        for code in vocabulary:
            assert code.explanation[0].isupper(), code
            assert code.explanation.endswith("."), code
            assert json.dumps(code) == f'"{code.value}"'


# --- anything at all ---------------------------------------------------------------------------------------------

HOSTILE = ["1e400", "−0.5", "1,234", " .05", "0.05*", "", "NaN", "-0", "0", "1e-30", "1e30", "9" * 60, "0.000", "\x00"]
scalars = st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=5), st.sampled_from(HOSTILE))
anything = st.recursive(
    scalars,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=4), inner, max_size=3)),
    max_leaves=6,
)


def places(node, at=()):
    """Every place in a reading's JSON."""
    yield at
    if isinstance(node, dict):
        for key in node:
            yield from places(node[key], (*at, key))
    elif isinstance(node, list):
        for i in range(len(node)):
            yield from places(node[i], (*at, i))


def put(node, at, value):
    for step in at[:-1]:
        node = node[step]
    node[at[-1]] = value


@settings(max_examples=300)
@given(st.data())
def test_whatever_replaces_any_field_is_read_or_refused_with_pointers_that_exist(data):
    reading = sample(data.draw(st.sampled_from(KINDS)))
    where = data.draw(st.sampled_from([at for at in places(reading) if at]))
    put(reading, where, data.draw(anything))
    refused = None
    try:
        result = read(reading)
    except ReadingErrors as refusal:
        refused = refusal
    if refused is None:
        assert isinstance(result, Reading)
        assert read(result.as_json()) == result
        assert isinstance(check_consistency(result), tuple)
    else:
        assert refused.errors
        assert all(error.pointer == "" or error.pointer.startswith("/") for error in refused.errors)


@given(anything)
def test_no_json_breaks_the_reader(data):
    with pytest.raises(ReadingErrors):
        read(data)
