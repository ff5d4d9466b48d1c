"""What every further analysis is a function of: the arrays of a frame, its plan, and what was pooled from them."""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from analysis.methods import Interval
from analysis.plans import Plan
from analysis.pools import Pooled
from analysis.wording import display, scale_of
from evidence.models import QuestionRevision

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Evidence:
    """``clusters`` numbers the studies (or papers) from 0; ``labels`` names them in that order."""

    question: QuestionRevision
    plan: Plan
    effects: FloatArray
    errors: FloatArray
    clusters: IntArray
    labels: tuple[str, ...]
    pooled: Pooled

    @property
    def one(self) -> str:
        """What a cluster is called: study, or paper."""
        return self.plan.cluster

    @property
    def many(self) -> str:
        return {"study": "studies", "paper": "papers"}[self.plan.cluster]

    def shown(self, *values: float) -> list[str]:
        """Effects in the words of the answer: on the scale people read, with its decimals and its unit."""
        interval = self.pooled.interval
        answer = display(self.question, self.plan.metric, self.pooled.value, interval.low, interval.high)
        scale = scale_of(self.question, self.plan.metric)
        return [answer.text(scale.show(value), signed=True) for value in values]


def is_settled(interval: Interval) -> bool:
    """Whether an interval excludes no effect."""
    return not interval.low <= 0.0 <= interval.high
