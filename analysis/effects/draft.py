"""The effect while it is being made: each step leaves its trace, so the derivation writes itself."""

import math
from dataclasses import dataclass, field
from typing import Any

from analysis.effects.plan import EffectPlan
from analysis.methods.effects import EffectEstimate, NoEffect
from analysis.methods.effects_vocabulary import Flag, Reason, Rule


class NotEstimable(Exception):
    """Leaves the making of an effect with the reason why there is none. Never passes ``effect_of``."""

    def __init__(self, reason: Reason) -> None:
        self.reason = reason
        super().__init__(reason.explanation)


@dataclass(frozen=True, slots=True)
class Bounded:
    """An effect with the smallest and largest standard error that the print allows (equal when it settles it)."""

    value: float
    standard_error: float
    low: float
    high: float

    def scaled(self, effect: EffectEstimate) -> "Bounded":
        """This effect converted: all three standard errors in the proportion of the chosen one."""
        error = effect.standard_error
        if self.low == self.high:
            return Bounded(effect.value, error, error, error)
        ratio = error / self.standard_error
        if not math.isfinite(ratio):
            raise NotEstimable(Reason.OUTSIDE_NUMERIC_RANGE)
        return Bounded(effect.value, error, self.low * ratio, self.high * ratio)


@dataclass(slots=True)
class Draft:
    """The plan in force and the trace so far: rules in the order used, steps, flags."""

    plan: EffectPlan
    rules: list[Rule] = field(default_factory=list)
    steps: list[dict[str, Any]] = field(default_factory=list)
    flags: list[Flag] = field(default_factory=list)

    def step(self, name: str, value: float | str) -> None:
        self.steps.append({"name": name, "value": value})

    def flag(self, flag: Flag) -> None:
        if flag not in self.flags:
            self.flags.append(flag)

    def take(self, rule: Rule, outcome: EffectEstimate | NoEffect) -> EffectEstimate:
        """Record a rule and its steps; leave when it gave no effect."""
        self.rules.append(rule)
        if isinstance(outcome, NoEffect):
            raise NotEstimable(outcome.reason)
        for name, value in outcome.steps:
            self.step(name, value)
        return outcome

    def settled(self, rule: Rule, outcome: EffectEstimate | NoEffect) -> Bounded:
        """Like :meth:`take`, for an effect whose standard error is settled."""
        effect = self.take(rule, outcome)
        error = effect.standard_error
        return Bounded(effect.value, error, error, error)

    def convert(self, rule: Rule, before: Bounded, outcome: EffectEstimate | NoEffect) -> Bounded:
        """Record a conversion of ``before`` and carry its bounds along."""
        effect = self.take(rule, outcome)
        self.step(f"after-{rule.value}", effect.value)
        return before.scaled(effect)
