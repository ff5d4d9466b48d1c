"""What is worked out beside the answer, against published values and hand-made cases."""

from typing import Any

import numpy as np
import pytest

from analysis.further import ANALYSES, work_out
from analysis.further.evidence import Evidence
from analysis.methods import NotEstimable, pool_effects
from analysis.plans import FURTHER, Plan
from analysis.pools import pool
from evidence.models import QuestionRevision
from tests.analysis.methods.check_data import column, data_set, rows


def evidence(effects: Any, variances: Any, clusters: Any, **plan: Any) -> Evidence:
    effects, errors = np.asarray(effects, dtype=float), np.sqrt(np.asarray(variances, dtype=float))
    names = list(dict.fromkeys(map(str, clusters)))
    numbers = np.array([names.index(str(cluster)) for cluster in clusters], dtype=np.int64)
    checked = Plan.read(plan, question_metric="mean-difference")
    pooled = pool(checked, effects, errors, numbers)
    assert not isinstance(pooled, NotEstimable)
    question = QuestionRevision(title="Title", intervention="it", outcome="that", metric="mean-difference", unit="kg")
    return Evidence(question, checked, effects, errors, numbers, tuple(names), pooled)


def finding(code: str, given: Evidence) -> dict[str, Any]:
    return next(found for found in work_out(given) if found["code"] == code)


def test_a_plan_can_name_every_analysis_and_no_other() -> None:
    assert tuple(ANALYSES) == FURTHER


def test_only_what_the_plan_names_is_worked_out() -> None:
    given = evidence([0.1, 0.5, 0.2], [0.01, 0.04, 0.02], [1, 1, 2], further=["dependence"])
    assert [found["code"] for found in work_out(given)] == ["dependence"]


def test_influence_leaves_out_each_bcg_trial() -> None:
    """Colditz et al. 1994; the answers without each trial were computed independently of this project."""
    found = finding("influence", evidence(*data_set("bcg_ln_rr"), range(1, 14)))
    values = {row[0]: row[2] for row in found["rows"]}
    expected = column("bcg_leave_one_out", "reml_mu")
    np.testing.assert_allclose([values[str(trial)] for trial in range(1, 14)], expected, rtol=1e-6)
    changes = [abs(row[2] - (-0.7145323422)) for row in found["rows"]]
    assert changes == sorted(changes, reverse=True)
    assert "No single study decides" in found["reading"]


def test_influence_says_on_which_study_the_verdict_hangs() -> None:
    found = finding("influence", evidence([0.9, 0.05, -0.04, 0.02], [1e-3] * 4, "abcd", model="common-effect"))
    assert "Without a its interval would no longer exclude no effect" in found["reading"]
    assert found["rows"][0][0] == "a"


def test_dependence_compares_the_ways_of_treating_one_study() -> None:
    """15 made estimates in 7 papers; averages by paper and three levels computed independently."""
    name = "cluster15"
    papers = [row["paper"] for row in rows(name)]
    y, v = column(name, "y"), column(name, "se") ** 2
    found = finding("dependence", evidence(y, v, papers))
    table = {row[0]: row[1:] for row in found["rows"]}
    np.testing.assert_allclose(table["Averaged, correlated 0"][0], 0.164672836345, rtol=1e-6)
    np.testing.assert_allclose(table["Averaged, correlated 0.8"][0], 0.160397434357, rtol=1e-6)
    np.testing.assert_allclose(table["Independent"][0], pool_effects(y, v).value, rtol=1e-9)
    assert all(low < value < high for value, low, high in table.values())
    assert found["reason"] is None


def test_dependence_has_nothing_to_say_of_one_estimate_a_study() -> None:
    found = finding("dependence", evidence([0.1, 0.2, 0.3], [0.01] * 3, "abc"))
    assert "nothing to treat otherwise" in found["reason"]
    assert found["rows"] == []


@pytest.mark.parametrize("clusters", ["a", "aa"])
def test_one_study_alone_gets_a_reason_from_every_analysis(clusters: str) -> None:
    given = evidence([0.1, 0.3][: len(clusters)], [0.01, 0.02][: len(clusters)], clusters)
    for found in work_out(given):
        assert found["reason"], found["code"]


def test_a_three_level_plan_is_refitted_as_such() -> None:
    y, v, district = (column("school_calendar", name) for name in ("d", "var", "district"))
    given = evidence(y, v, district, dependence="three-level")
    found = finding("influence", given)
    assert len(found["rows"]) == 11
    dependence = finding("dependence", given)
    as_planned, nested = dependence["rows"][0], dependence["rows"][2]
    np.testing.assert_allclose(as_planned[1], 0.18471316, rtol=1e-6)
    assert nested[1:] == as_planned[1:]


def test_lopsidedness_of_a_literature_made_with_selection() -> None:
    """40 estimates simulated with selection for significance; every number computed independently of this project."""
    y, v = data_set("bias40")
    found = finding("lopsided", evidence(y, v, range(40)))
    table = {row[0]: row[1:] for row in found["rows"]}
    np.testing.assert_allclose(table["Funnel asymmetry"][0], 0.195748829792, rtol=1e-9)
    np.testing.assert_allclose(table["Rank correlation"][0], 0.624418189423, rtol=1e-9)
    np.testing.assert_allclose(table["Excess of significant estimates"][0], 0.0227104858639, rtol=1e-9)
    np.testing.assert_allclose(table["Step-function selection model"][0], 0.00066838413, rtol=1e-5)
    np.testing.assert_allclose(table["Step-function selection model"][1], 0.032882556576, rtol=1e-6)
    np.testing.assert_allclose(table["Precision-effect estimate (PET–PEESE)"][1], 0.0676288524687, rtol=1e-9)
    np.testing.assert_allclose(table["Adequately powered estimates only"][1], 0.0780937377842, rtol=1e-9)
    assert "The tests disagree, and that is the finding" in found["reading"]
    assert "step-function selection model see signs" in found["reading"]
    assert found["flags"] == []


def test_lopsidedness_warns_of_few_studies_and_of_dependence() -> None:
    found = finding("lopsided", evidence(*data_set("eight_schools"), [1, 1, 2, 3, 4, 5, 6, 7]))
    assert "None of" in found["reading"]
    assert any("little power" in flag for flag in found["flags"])
    assert any("as independent" in flag for flag in found["flags"])
