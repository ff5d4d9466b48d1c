"""Does one study carry the answer? The protocol run again without each study in turn."""

import numpy as np

from analysis.further.evidence import Evidence, is_settled
from analysis.further.findings import COUNT, EFFECT, TEXT, Column, Finding
from analysis.methods import NotEstimable
from analysis.pools import Pooled, pool

MOST_REFITS = 1_000


def influence(evidence: Evidence) -> Finding:
    """The pooled effect without each study (or paper), those that move it most first.

    Two are needed, else nothing would be left. Beyond ``MOST_REFITS`` only the heaviest are left out in turn, and the
    finding says so: a study moves the mean at most by its weight.
    """
    noun = evidence.one
    title = f"Does one {noun} carry the answer?"
    if len(evidence.labels) < 2:
        return Finding(title, reason=f"Leaving one out needs at least two {evidence.many}.")
    shares = np.bincount(evidence.clusters, weights=evidence.pooled.weights, minlength=len(evidence.labels))
    heaviest = np.argsort(-shares, kind="stable")[:MOST_REFITS]
    without: list[tuple[int, Pooled]] = []
    for cluster in heaviest.tolist():
        rest = evidence.clusters != cluster
        refit = pool(evidence.plan, evidence.effects[rest], evidence.errors[rest], evidence.clusters[rest])
        if not isinstance(refit, NotEstimable):
            without.append((cluster, refit))
    answer = evidence.pooled
    without.sort(key=lambda found: -abs(found[1].value - answer.value))
    values = [refit.value for _, refit in without]
    low, high, most = evidence.shown(min(values), max(values), without[0][1].value)
    first = evidence.labels[without[0][0]]
    settled = is_settled(answer.interval)
    turning = [label for label, refit in without if is_settled(refit.interval) != settled]
    reading = (
        f"Without any one {noun} the average would lie between {low} and {high}; "
        f"leaving out {first} moves it most, to {most}. "
    )
    what = "its interval would no longer exclude no effect" if settled else "its interval would exclude no effect"
    reading += (
        f"Without {_listed([evidence.labels[label] for label in turning])} {what}."
        if turning
        else f"No single {noun} decides whether the interval excludes no effect."
    )
    left = len(evidence.labels) - len(without)
    return Finding(
        title,
        reading,
        columns=[
            Column("left_out", f"{noun.capitalize()} left out", TEXT),
            Column("estimates", "Its estimates", COUNT),
            Column("value", "Average without it", EFFECT),
            Column("low", "Interval, low", EFFECT),
            Column("high", "high", EFFECT),
        ],
        rows=[
            (
                evidence.labels[cluster],
                int((evidence.clusters == cluster).sum()),
                refit.value,
                refit.interval.low,
                refit.interval.high,
            )
            for cluster, refit in without
        ],
        flags=[f"Only the {MOST_REFITS} heaviest were left out in turn; {left} were not."] if left else [],
    )


def _listed(labels: list[str], most: int = 3) -> str:
    shown = labels[:most]
    if len(labels) > most:
        shown.append(f"{len(labels) - most} others")
    return shown[0] if len(shown) == 1 else f"{', '.join(shown[:-1])} or {shown[-1]} (each alone)"
