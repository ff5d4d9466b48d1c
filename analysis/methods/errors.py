"""Errors raised by the numerical methods.

    MethodsError
    ├── InvalidInput     the arrays cannot be data: wrong shape, a variance that is not positive, not finite
    └── UnknownChoice    the name of a model, an estimator or an interval is not one of those documented

Anything that follows from valid data (no estimates, too few for an interval, no convergence) is a stated result,
not an error: see :class:`NotEstimable` and the `flags` and `converged` fields of the results.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import ClassVar, Literal


class MethodsError(ValueError):
    """Root of the errors of this package; `code` is stable, the wording may improve."""

    code: ClassVar[str] = "methods-error"


class InvalidInput(MethodsError):
    """An array cannot be what it is said to be. `field` names the argument, `index` the first bad row."""

    code: ClassVar[str] = "invalid-input"

    def __init__(self, field: str, message: str, index: int | None = None) -> None:
        self.field = field
        self.index = index
        place = field if index is None else f"{field}[{index}]"
        super().__init__(f"{place}: {message}")


class UnknownChoice(MethodsError):
    """A name is not one of the documented ones. `field` names the argument, `known` lists the names."""

    code: ClassVar[str] = "unknown-choice"

    def __init__(self, field: str, value: object, known: Iterable[str]) -> None:
        self.field = field
        self.value = value
        self.known = tuple(known)
        super().__init__(f"{field}: {value!r} is not known; choose one of {', '.join(self.known)}")


@dataclass(frozen=True, slots=True)
class NotEstimable:
    """A stated result: the data are valid, but there is no answer, and `reason` says why in a sentence."""

    reason: str
    k: int = 0
    estimable: Literal[False] = False
