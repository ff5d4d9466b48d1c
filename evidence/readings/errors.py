"""The two shapes in which a reading speaks back: errors that refuse it and discrepancies that only warn."""

from collections.abc import Iterable
from dataclasses import dataclass

from evidence.readings.vocabulary import DiscrepancyCode, ErrorCode


def escape(token: str) -> str:
    """One reference token of an RFC 6901 JSON pointer."""
    return token.replace("~", "~0").replace("/", "~1")


@dataclass(frozen=True, slots=True)
class ReadingError:
    """One thing that makes a reading impossible: where (RFC 6901), which rule, and what to do about it."""

    pointer: str
    code: ErrorCode
    detail: str


class ReadingErrors(ValueError):
    """A reading was refused; ``errors`` lists everything wrong with it, in the order of the fields."""

    def __init__(self, errors: Iterable[ReadingError]) -> None:
        self.errors: tuple[ReadingError, ...] = tuple(errors)
        super().__init__(" ".join(error.detail for error in self.errors))


@dataclass(frozen=True, slots=True)
class Discrepancy:
    """Printed numbers that cannot all be right after rounding. The coding stands; someone should look again."""

    code: DiscrepancyCode
    pointer: str
    detail: str
