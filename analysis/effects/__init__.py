"""Effects: a reading turned into a question's metric, with the derivation that produced it.

Where to start: ``plan`` (the choices), ``result`` (``effect_of``). By kind of reading: ``regression``,
``ready_made``, ``groups``; shared steps in ``precision``, ``partial`` and ``conversions``. The formulas are in
``analysis.methods``.
"""

from analysis.effects.plan import COVARIANCE_POLICIES, EffectPlan
from analysis.effects.result import EffectResult, effect_of
from analysis.methods.effects_vocabulary import Flag, Reason, Rule


def explain(code: str) -> str | None:
    """The one-sentence explanation of a rule, flag or reason; ``None`` for a code that is none of these."""
    return _EXPLANATIONS.get(code)


_EXPLANATIONS: dict[str, str] = {
    member.value: member.explanation for vocabulary in (Rule, Flag, Reason) for member in vocabulary
}

__all__ = [
    "COVARIANCE_POLICIES",
    "EffectPlan",
    "EffectResult",
    "Flag",
    "Reason",
    "Rule",
    "effect_of",
    "explain",
]
