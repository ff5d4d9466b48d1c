"""Who may do what: the one place that answers, for pages, programs and jobs alike.

Everything is denied unless a role opens it. A token can do what its owner's role allows and its scopes do not withhold,
in its own evidence base and nowhere else. What a person may not even see answers as if it did not exist.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import assert_never

from django.db.models import QuerySet

from evidence.changes import Actor
from evidence.errors import NotAllowed, NotHere
from evidence.models import EvidenceBase, Membership
from evidence.vocabularies import Role, Scope


class Action(StrEnum):
    """The things one can do in an evidence base."""

    READ = "read"
    ADD_PAPERS = "add papers"
    FILE_CODINGS = "file codings"
    REVISE_PAPERS = "revise and retract papers"
    CORRECT_ESTIMATES = "correct estimates"
    DECIDE_ELIGIBILITY = "decide eligibility"
    REQUEST_RECOMPUTES = "have work run again"
    DEFINE_QUESTIONS = "define questions"
    ADOPT_PROTOCOLS = "adopt protocols"
    MANAGE_MEMBERS = "manage members"
    MANAGE_TOKENS = "manage one's own tokens"


_READER = frozenset({Action.READ, Action.MANAGE_TOKENS})
_CODER = _READER | {Action.ADD_PAPERS, Action.FILE_CODINGS}
_REVIEWER = _CODER | {
    Action.REVISE_PAPERS,
    Action.CORRECT_ESTIMATES,
    Action.DECIDE_ELIGIBILITY,
    Action.REQUEST_RECOMPUTES,
}
_STEWARD = _REVIEWER | {Action.DEFINE_QUESTIONS, Action.ADOPT_PROTOCOLS, Action.MANAGE_MEMBERS}

ROLE_ALLOWS: dict[str, frozenset[Action]] = {
    Role.READER: _READER,
    Role.CODER: _CODER,
    Role.REVIEWER: _REVIEWER,
    Role.STEWARD: _STEWARD,
}

SCOPE_OPENS: dict[str, frozenset[Action]] = {
    Scope.READ: frozenset({Action.READ}),
    Scope.CODE: _CODER - _READER,
    Scope.REVIEW: _REVIEWER - _CODER,
    # A token that could issue tokens would outlive its own expiry: only a steward's scope carries it.
    Scope.STEWARD: (_STEWARD - _REVIEWER) | {Action.MANAGE_TOKENS},
}


@dataclass(frozen=True)
class Access:
    """A person's way into one evidence base: their role there and what it lets them do just now."""

    evidence_base: EvidenceBase
    actor: Actor
    role: Role
    actions: frozenset[Action]

    def allows(self, action: Action) -> bool:
        return action in self.actions

    def require(self, action: Action) -> None:
        """Raise ``NotAllowed`` with a sentence that says what is missing."""
        if action in self.actions:
            return
        if action in ROLE_ALLOWS[self.role]:
            raise NotAllowed(f"This token's scopes do not let it {_in_words(action)}.", code="scope-missing")
        raise NotAllowed(f"A {self.role.label.lower()} may not {_in_words(action)} here.", code="role-missing")


def _in_words(action: Action) -> str:
    return "read" if action is Action.READ else action.value


def visible_bases(actor: Actor) -> QuerySet[EvidenceBase]:
    """The evidence bases this actor may know of."""
    bases = EvidenceBase.objects.filter(memberships__person=actor.person)
    if actor.token is not None and actor.token.evidence_base_id is not None:
        bases = bases.filter(pk=actor.token.evidence_base_id)
    return bases


def enter(actor: Actor, slug: str) -> Access:
    """The actor's access to an evidence base, or ``NotHere`` for a stranger to it.

    A sign-in token belongs to no evidence base: it sees which ones its owner has and issues tokens for them.
    """
    membership = (
        Membership.objects.select_related("evidence_base")
        .filter(evidence_base__slug=slug, person=actor.person, person__is_active=True)
        .first()
    )
    if membership is None:
        raise NotHere(f"There is no evidence base {slug!r} here.")
    role = Role(membership.role)
    return Access(membership.evidence_base, actor, role, _actions(actor, role, membership.evidence_base))


def _actions(actor: Actor, role: Role, base: EvidenceBase) -> frozenset[Action]:
    token = actor.token
    allowed = ROLE_ALLOWS[role]
    if token is None:
        return allowed
    if token.evidence_base_id is None:
        return allowed & {Action.MANAGE_TOKENS}
    if token.evidence_base_id != base.pk:
        raise NotHere(f"There is no evidence base {base.slug!r} here.")
    opened: frozenset[Action] = frozenset()
    for scope in token.scopes:
        opened |= SCOPE_OPENS[scope]
    return allowed & opened


def may_create_bases(actor: Actor) -> bool:
    """Only a person, or their sign-in token, and only where an administrator has said so."""
    in_a_base = actor.token is not None and actor.token.evidence_base_id is not None
    return actor.person.may_create_evidence_bases and not in_a_base


def scopes_within(role: Role) -> frozenset[Scope]:
    """The scopes that add something for a person of this role."""
    match role:
        case Role.READER:
            return frozenset({Scope.READ})
        case Role.CODER:
            return frozenset({Scope.READ, Scope.CODE})
        case Role.REVIEWER:
            return frozenset({Scope.READ, Scope.CODE, Scope.REVIEW})
        case Role.STEWARD:
            return frozenset(Scope)
        case _:
            assert_never(role)
