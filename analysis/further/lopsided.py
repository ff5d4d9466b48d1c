"""Is the literature lopsided? Tests for small studies that report other effects, and what correcting for it would give.

The tests take estimates as independent, as they were published; where studies give several estimates the finding says
so. A verdict in words is given only when the tests agree: where they do not, that is the finding.
"""

from analysis.further.evidence import Evidence
from analysis.further.findings import EFFECT, P_VALUE, TEXT, Cell, Column, Finding
from analysis.methods import NotEstimable
from analysis.methods.adequately_powered import adequately_powered
from analysis.methods.endogenous_kink import endogenous_kink
from analysis.methods.selection_model import selection_model
from analysis.methods.significance_counts import excess_significance
from analysis.methods.small_study_tests import conditional_pet_peese, funnel_asymmetry_test, rank_correlation_test
from analysis.methods.trim_and_fill import trim_and_fill

ALPHA = 0.05
FEW = 10
"""Below ten studies the Cochrane Handbook (chapter 13) advises against tests for funnel asymmetry."""

LEAST = 3

TITLE = "Is the literature lopsided?"
Row = tuple[Cell, Cell, Cell, Cell, Cell]


def lopsided(evidence: Evidence) -> Finding:
    """Four tests of small-study effects and selection, and five corrected averages."""
    if evidence.effects.size < LEAST or len(evidence.labels) < 2:
        return Finding(TITLE, reason=f"These tests need at least {LEAST} estimates from two {evidence.many}.")
    tests = _tests(evidence)
    decided = [(name, p) for name, p, *_ in tests if isinstance(p, float)]
    if not decided:
        return Finding(TITLE, reason="None of these tests is estimable from these estimates.")
    corrected = _corrected(evidence)
    flags = []
    if len(evidence.labels) < FEW:
        flags.append(f"Fewer than ten {evidence.many}: these tests then have little power, and silence proves nothing.")
    if len(evidence.labels) < evidence.effects.size:
        flags.append(
            f"The tests take estimates of one {evidence.one} as independent and so find too much rather easily."
        )
    return Finding(
        TITLE,
        f"{_verdict(decided)} {_range(evidence, corrected)}".strip(),
        columns=[
            Column("method", "Method", TEXT),
            Column("p", "p of no selection", P_VALUE),
            Column("value", "Average corrected for it", EFFECT),
            Column("low", "Interval, low", EFFECT),
            Column("high", "high", EFFECT),
        ],
        rows=[*tests, *corrected],
        flags=flags,
    )


def _tests(evidence: Evidence) -> list[Row]:
    """Each test with its p value; None where it is not estimable or its search did not converge."""
    y, v = evidence.effects, evidence.errors**2
    asymmetry = funnel_asymmetry_test(y, v)
    ranks = rank_correlation_test(y, v)
    excess = excess_significance(y, v)
    steps = selection_model(y, v, direction="positive" if evidence.pooled.value >= 0 else "negative")
    return [
        ("Funnel asymmetry", None if isinstance(asymmetry, NotEstimable) else asymmetry.asymmetry.p, None, None, None),
        ("Rank correlation", None if isinstance(ranks, NotEstimable) else ranks.p_corrected, None, None, None),
        ("Excess of significant estimates", None if isinstance(excess, NotEstimable) else excess.p, None, None, None),
        (
            "Step-function selection model",
            *(
                (None, None, None, None)
                if isinstance(steps, NotEstimable) or not steps.converged
                else (steps.p, steps.effect.value, steps.effect.low, steps.effect.high)
            ),
        ),
    ]


def _corrected(evidence: Evidence) -> list[Row]:
    """Averages that other methods give once small-study effects are allowed for; those that did not converge are not
    among them.
    """
    y, v = evidence.effects, evidence.errors**2
    rows: list[Row] = []
    conditional = conditional_pet_peese(y, v)
    if not isinstance(conditional, NotEstimable) and conditional.converged:
        effect = conditional.effect
        rows.append(("Precision-effect estimate (PET–PEESE)", None, effect.value, effect.low, effect.high))
    filled = trim_and_fill(y, v)
    if not isinstance(filled, NotEstimable) and filled.converged:
        interval = filled.adjusted.interval
        rows.append(("Trim and fill", None, filled.adjusted.value, interval.low, interval.high))
    powered = adequately_powered(y, v)
    if not isinstance(powered, NotEstimable):
        interval = powered.pooled.interval
        rows.append(("Adequately powered estimates only", None, powered.value, interval.low, interval.high))
    kink = endogenous_kink(y, v)
    if not isinstance(kink, NotEstimable) and kink.converged:
        rows.append(("Endogenous kink", None, kink.effect.value, kink.effect.low, kink.effect.high))
    return rows


def _verdict(decided: list[tuple[Cell, float]]) -> str:
    seeing = [str(name).lower() for name, p in decided if p < ALPHA]
    silent = [str(name).lower() for name, p in decided if p >= ALPHA]
    if not seeing:
        return f"None of {_number(len(decided))} sees small studies reporting other effects than large ones."
    if not silent:
        return f"All of {_number(len(decided))} see signs that what was published depends on what was found."
    return (
        f"The tests disagree, and that is the finding: {_listed(seeing)} see{'s' if len(seeing) == 1 else ''} signs of "
        f"selection, {_listed(silent)} do{'es' if len(silent) == 1 else ''} not."
    )


def _range(evidence: Evidence, corrected: list[Row]) -> str:
    values = [row[2] for row in corrected if isinstance(row[2], float)]
    if not values:
        return ""
    low, high = evidence.shown(min(values), max(values))
    return f"Corrected for it in the usual ways the average would lie between {low} and {high}."


def _number(tests: int) -> str:
    return "one test" if tests == 1 else f"{tests} tests"


def _listed(names: list[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
