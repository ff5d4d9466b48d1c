"""Who may do what: the whole table, spelled out, so that a change of it is seen."""

from datetime import timedelta

import pytest
from django.utils import timezone

from evidence.changes import Actor
from evidence.errors import Conflict, Invalid, NotAllowed, NotHere, NotSignedIn, TooManyTries
from evidence.models import Membership, Token
from evidence.operations import people, tokens
from evidence.operations.bases import create_evidence_base, remove_member, set_member
from evidence.policy import Action, enter, visible_bases
from evidence.vocabularies import Role, Scope
from tests.register import PASSWORD, a_base, a_member, a_person

pytestmark = pytest.mark.django_db

READER = {Action.READ, Action.MANAGE_TOKENS}
CODER = READER | {Action.ADD_PAPERS, Action.FILE_CODINGS}
REVIEWER = CODER | {
    Action.REVISE_PAPERS,
    Action.CORRECT_ESTIMATES,
    Action.DECIDE_ELIGIBILITY,
    Action.REQUEST_RECOMPUTES,
}
MAY = {Role.READER: READER, Role.CODER: CODER, Role.REVIEWER: REVIEWER, Role.STEWARD: set(Action)}


@pytest.mark.parametrize("role", list(Role))
def test_a_role_allows_what_the_table_says_and_nothing_else(role: Role) -> None:
    access = a_member(a_base(), role)
    assert {action for action in Action if access.allows(action)} == MAY[role]
    for action in set(Action) - MAY[role]:
        with pytest.raises(NotAllowed, match=role.label.lower()):
            access.require(action)


@pytest.mark.parametrize(
    ("scopes", "expected"),
    [
        (["read"], {Action.READ}),
        (["code"], CODER - READER),
        (["read", "review"], {Action.READ} | (REVIEWER - CODER)),
        (["steward"], (set(Action) - REVIEWER) | {Action.MANAGE_TOKENS}),
        (["read", "code", "review", "steward"], set(Action)),
    ],
)
def test_a_token_is_narrowed_by_its_scopes(scopes: list[str], expected: set[Action]) -> None:
    access = a_base()
    issued = tokens.issue_token(access=access, name="test", scopes=scopes)
    through = enter(tokens.authenticate(issued.text), access.evidence_base.slug)
    assert {action for action in Action if through.allows(action)} == expected


def test_a_token_never_allows_more_than_its_owner_may_now() -> None:
    steward = a_base()
    member = a_member(steward, Role.REVIEWER)
    issued = tokens.issue_token(access=member, name="test", scopes=["read", "review"])
    set_member(access=steward, email=member.actor.person.email, role=Role.READER)
    through = enter(tokens.authenticate(issued.text), steward.evidence_base.slug)
    assert through.actions == {Action.READ}
    remove_member(access=steward, person_id=str(member.actor.person.pk))
    with pytest.raises(NotHere):
        enter(tokens.authenticate(issued.text), steward.evidence_base.slug)


def test_a_scope_beyond_ones_role_cannot_be_handed_on() -> None:
    with pytest.raises(Invalid) as caught:
        tokens.issue_token(access=a_member(a_base(), Role.CODER), name="test", scopes=["read", "steward"])
    assert [problem.pointer for problem in caught.value.problems] == ["/scopes/1"]


def test_a_token_of_one_evidence_base_does_not_know_another_of_its_owner() -> None:
    first = a_base()
    person = first.actor
    create_evidence_base(actor=person, slug="second", name="Second")
    actor = tokens.authenticate(tokens.issue_token(access=first, name="test", scopes=list(Scope)).text)
    with pytest.raises(NotHere):
        enter(actor, "second")
    assert [base.slug for base in visible_bases(actor)] == [first.evidence_base.slug]
    assert visible_bases(person).count() == 2


def test_a_stranger_finds_nothing() -> None:
    base = a_base().evidence_base
    with pytest.raises(NotHere):
        enter(Actor(a_person()), base.slug)
    assert not visible_bases(Actor(a_person())).exists()


def test_a_sign_in_token_only_lists_and_issues() -> None:
    access = a_base()
    actor = tokens.authenticate(tokens.sign_in_token(access.actor.person).text)
    assert enter(actor, access.evidence_base.slug).actions == {Action.MANAGE_TOKENS}
    create_evidence_base(actor=actor, slug="made-by-token", name="Made")
    with pytest.raises(NotAllowed):
        create_evidence_base(actor=Actor(a_person()), slug="not-allowed", name="Not allowed")


@pytest.mark.parametrize(
    "spoil",
    [
        lambda token: {"revoked_at": timezone.now()},
        lambda token: {"expires_at": timezone.now() - timedelta(seconds=1)},
        lambda token: {"secret_sha256": "0" * 64},
    ],
)
def test_a_spoilt_token_is_nobody(spoil) -> None:
    issued = tokens.issue_token(access=a_base(), name="test", scopes=["read"])
    assert tokens.authenticate(issued.text).token == issued.token
    Token.objects.filter(pk=issued.token.pk).update(**spoil(issued.token))
    with pytest.raises(NotSignedIn):
        tokens.authenticate(issued.text)


@pytest.mark.parametrize("text", ["", ".", "sy_0.x", "nonsense", "a" * 10_000, "\x00.\x00"])
def test_what_is_no_token_is_nobody(text: str) -> None:
    with pytest.raises(NotSignedIn):
        tokens.authenticate(text)


def test_the_secret_is_not_kept() -> None:
    issued = tokens.issue_token(access=a_base(), name="test", scopes=["read"])
    secret = issued.text.partition(".")[2]
    stored = Token.objects.filter(pk=issued.token.pk).values().get()
    assert len(secret) >= 43  # 256 bits in base 64
    assert secret not in str(stored)


def test_the_last_steward_cannot_leave() -> None:
    access = a_base()
    person = access.actor.person
    with pytest.raises(Conflict, match="steward"):
        remove_member(access=access, person_id=str(person.pk))
    with pytest.raises(Conflict, match="steward"):
        set_member(access=access, email=person.email, role=Role.READER)
    assert Membership.objects.get(person=person).role == Role.STEWARD


def test_sign_in_wants_the_right_password_of_an_active_person() -> None:
    person = a_person()
    assert people.sign_in(email=person.email.upper(), password=PASSWORD, address="192.0.2.1") == person
    for email, password in ((person.email, "wrong"), ("nobody@example.org", PASSWORD)):
        with pytest.raises(NotSignedIn):
            people.sign_in(email=email, password=password, address="192.0.2.1")
    person.is_active = False
    person.save()
    with pytest.raises(NotSignedIn):
        people.sign_in(email=person.email, password=PASSWORD, address="192.0.2.1")


def test_repeated_failures_shut_the_door_for_a_while() -> None:
    person = a_person()
    for _ in range(people.FAILURES_ALLOWED_PER_EMAIL):
        with pytest.raises(NotSignedIn):
            people.sign_in(email=person.email, password="wrong", address="192.0.2.1")
    with pytest.raises(TooManyTries) as caught:
        people.sign_in(email=person.email, password=PASSWORD, address="192.0.2.2")
    assert caught.value.retry_after_seconds > 0


def test_one_address_cannot_try_many_people() -> None:
    for number in range(people.FAILURES_ALLOWED_PER_ADDRESS):
        with pytest.raises(NotSignedIn):
            people.sign_in(email=f"guess{number}@example.org", password="wrong", address="192.0.2.9")
    with pytest.raises(TooManyTries):
        people.sign_in(email=a_person().email, password=PASSWORD, address="192.0.2.9")


def test_a_weak_password_is_refused_with_the_reason() -> None:
    with pytest.raises(Invalid) as caught:
        people.create_person(email="new@example.org", name="New", password="password1234")
    assert caught.value.problems[0].pointer == "/password"
