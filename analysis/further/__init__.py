"""What a protocol can have worked out beside the answer: each analysis one module, each result one shape.

A protocol names them in ``further``; a synthesis keeps what they find. An analysis is a function of the evidence frame
and its pooled effect that returns a ``Finding``: a reading in plain words, a table, its flags, or the reason why there
is none. Pages and programs show any finding without knowing which analysis made it.
"""

from collections.abc import Callable, Iterator
from typing import Any

from analysis.further.dependence import dependence
from analysis.further.evidence import Evidence
from analysis.further.findings import Finding
from analysis.further.influence import influence
from analysis.further.lopsided import lopsided

ANALYSES: dict[str, Callable[[Evidence], Finding]] = {
    "influence": influence,
    "dependence": dependence,
    "lopsided": lopsided,
}


def work_out(evidence: Evidence) -> Iterator[dict[str, Any]]:
    """Every analysis that the plan names, in the order of the registry, as plain JSON data."""
    for code, analysis in ANALYSES.items():
        if code in evidence.plan.further:
            yield {"code": code, **analysis(evidence).as_json()}
