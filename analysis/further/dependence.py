"""What if estimates of one study were treated otherwise? The answer under each way in use."""

from dataclasses import replace

import numpy as np

from analysis.further.evidence import Evidence
from analysis.further.findings import EFFECT, TEXT, Cell, Column, Finding
from analysis.methods import Interval, NotEstimable, pool_effects
from analysis.methods.one_per_paper import one_per_paper
from analysis.methods.robust import robust_fit
from analysis.plans import INDEPENDENT, NESTED_HETEROGENEITY, THREE_LEVEL
from analysis.pools import pool

CORRELATIONS = (0.0, 0.5, 0.8, 1.0)


def dependence(evidence: Evidence) -> Finding:
    """The average when estimates of a study are independent, nested, robustly combined, or reduced to one.

    Needs a study with several estimates, and two studies.
    """
    noun = evidence.one
    title = f"What if estimates of one {noun} were treated otherwise?"
    counts = np.bincount(evidence.clusters, minlength=len(evidence.labels))
    if len(evidence.labels) < 2 or counts.max() < 2:
        return Finding(title, reason=f"Every {noun} gives one estimate, so there is nothing to treat otherwise.")
    rows: list[tuple[Cell, ...]] = [_row("As the protocol says", evidence.pooled.value, evidence.pooled.interval)]
    rows += _nested_and_independent(evidence)
    rows += _robust(evidence)
    rows += _one_each(evidence)
    values = [float(row[1]) for row in rows if row[1] is not None]
    low, high = evidence.shown(min(values), max(values))
    several = int((counts > 1).sum())
    return Finding(
        title,
        f"{several} of {len(evidence.labels)} {evidence.many} give several estimates. "
        f"Whichever way they are treated, the average lies between {low} and {high}.",
        columns=[
            Column("treatment", f"Estimates of one {noun}", TEXT),
            Column("value", "Average", EFFECT),
            Column("low", "Interval, low", EFFECT),
            Column("high", "high", EFFECT),
        ],
        rows=rows,
        flags=["A correlation between estimates of one study is assumed where one is named; it is not estimated."],
    )


def _nested_and_independent(evidence: Evidence) -> list[tuple[Cell, ...]]:
    plan = evidence.plan
    estimator = plan.heterogeneity if plan.heterogeneity in NESTED_HETEROGENEITY else NESTED_HETEROGENEITY[0]
    nested = replace(plan, model="random-effects", dependence=THREE_LEVEL, heterogeneity=estimator, interval="t")
    plain = replace(
        plan, model="random-effects", dependence=INDEPENDENT, heterogeneity=estimator, interval="hartung-knapp"
    )
    rows = []
    for label, other in (("Independent", plain), ("Nested in it (three levels)", nested)):
        found = pool(other, evidence.effects, evidence.errors, evidence.clusters)
        if not isinstance(found, NotEstimable):
            rows.append(_row(label, found.value, found.interval))
    return rows


def _robust(evidence: Evidence) -> list[tuple[Cell, ...]]:
    """The weights of the answer with a cluster-robust variance (CR2, Satterthwaite degrees of freedom)."""
    found = robust_fit(evidence.effects, evidence.pooled.weights, evidence.clusters, level=float(evidence.plan.level))
    label = "Weighted as in the answer, interval robust to any dependence (CR2)"
    if isinstance(found, NotEstimable):
        return [(label, None, None, None)]
    return [(label, float(found.coefficients[0]), float(found.low[0]), float(found.high[0]))]


def _one_each(evidence: Evidence) -> list[tuple[Cell, ...]]:
    rows = []
    variances = evidence.errors**2
    for rule, label in (("most-precise", "Only the most precise"), ("median", "Only the median")):
        reduced = one_per_paper(evidence.effects, variances, evidence.clusters, rule=rule)
        rows.append(_pooled_row(label, reduced.effects, reduced.variances, evidence))
    for correlation in CORRELATIONS:
        reduced = one_per_paper(evidence.effects, variances, evidence.clusters, correlation=correlation)
        rows.append(_pooled_row(f"Averaged, correlated {correlation:g}", reduced.effects, reduced.variances, evidence))
    return rows


def _pooled_row(label: str, effects: np.ndarray, variances: np.ndarray, evidence: Evidence) -> tuple[Cell, ...]:
    found = pool_effects(effects, variances, level=float(evidence.plan.level))
    if isinstance(found, NotEstimable):
        return (label, None, None, None)
    return _row(label, found.value, found.interval)


def _row(label: str, value: float, interval: Interval) -> tuple[Cell, ...]:
    return (label, value, interval.low, interval.high)
