"""What can go wrong in the register, as one small tree.

    EvidenceError
    ├── NotHere             the thing does not exist, or not for this person
    ├── NotAllowed          the person may see it but not do this
    ├── NotSignedIn         no valid sign-in or token
    ├── TooManyTries        sign-in refused for a while
    ├── Invalid             the input cannot be accepted; carries one problem per field
    └── Conflict            the input is fine but the register has moved on, or already says so

Every class has a stable ``code`` that clients may branch on; the sentence may improve at any time. The API turns
them into problem details and the pages into messages, each in one place.
"""

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class FieldProblem:
    """One thing wrong with one field; ``pointer`` is an RFC 6901 JSON Pointer into what was sent."""

    pointer: str
    code: str
    detail: str

    def below(self, prefix: str) -> "FieldProblem":
        return FieldProblem(prefix + self.pointer, self.code, self.detail)


class EvidenceError(Exception):
    code = "evidence-error"
    title = "The register refused this"

    def __init__(self, detail: str, *, code: str | None = None, title: str | None = None) -> None:
        super().__init__(detail)
        self.detail = detail
        self.code = code or self.code
        self.title = title or self.title


class NotHere(EvidenceError):
    code = "not-here"
    title = "There is no such thing here"


class NotAllowed(EvidenceError):
    code = "not-allowed"
    title = "Your role or token does not allow this"


class NotSignedIn(EvidenceError):
    code = "not-signed-in"
    title = "Sign-in is needed"


class TooManyTries(EvidenceError):
    code = "too-many-tries"
    title = "Too many failed sign-ins"

    def __init__(self, detail: str, *, retry_after_seconds: int) -> None:
        super().__init__(detail)
        self.retry_after_seconds = retry_after_seconds


class Invalid(EvidenceError):
    code = "invalid"
    title = "Some of what was sent cannot be accepted"

    def __init__(self, problems: Sequence[FieldProblem], *, detail: str | None = None) -> None:
        self.problems = tuple(problems)
        super().__init__(detail or " ".join(problem.detail for problem in self.problems[:3]))
        if len({problem.code for problem in self.problems}) == 1:
            self.code = self.problems[0].code

    @classmethod
    def field(cls, pointer: str, code: str, detail: str) -> "Invalid":
        return cls([FieldProblem(pointer, code, detail)])


class Conflict(EvidenceError):
    code = "conflict"
    title = "The register has moved on"
