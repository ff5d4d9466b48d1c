"""Evidence bases and their members."""

import re
from datetime import datetime

from django.db import IntegrityError, transaction

from evidence.changes import Actor, recording
from evidence.errors import Conflict, Invalid, NotAllowed, NotHere
from evidence.models import EvidenceBase, Membership, Person
from evidence.policy import Access, Action, may_create_bases
from evidence.vocabularies import Role, Verb

SLUG = re.compile(r"[a-z0-9]+(?:-[a-z0-9]+)*", re.ASCII)


def create_evidence_base(
    *,
    actor: Actor,
    slug: str,
    name: str,
    description: str = "",
    is_invented: bool = False,
    at: datetime | None = None,
) -> EvidenceBase:
    """A new, empty evidence base whose first steward is its creator. Its creation is its change 1."""
    if not may_create_bases(actor):
        raise NotAllowed("Only people an administrator has allowed to may create evidence bases, signed in themselves.")
    check_slug(slug)
    if not name.strip():
        raise Invalid.field("/name", "missing", "An evidence base needs a name.")
    base = EvidenceBase(slug=slug, name=name.strip(), description=description, is_invented=is_invented)
    try:
        # The base, its first member and its first change appear together or not at all.
        with transaction.atomic(durable=True):
            _insert_with_first_change(base, actor, at)
    except IntegrityError as error:
        if EvidenceBase.objects.filter(slug=slug).exists():
            raise Conflict(f"There is an evidence base {slug!r} already.", code="slug-taken") from error
        raise
    base.refresh_from_db()
    return base


def _insert_with_first_change(base: EvidenceBase, actor: Actor, at: datetime | None) -> None:
    base.save(force_insert=True)
    with recording(
        evidence_base=base,
        actor=actor,
        verb=Verb.BASE_CREATED,
        summary=f"{base.name} created",
        subject={"evidence_base": base.pk},
        at=at,
        durable=False,
    ):
        Membership.objects.create(evidence_base=base, person=actor.person, role=Role.STEWARD)


def set_member(*, access: Access, email: str, role: str, at: datetime | None = None) -> Membership:
    """Give a person a role in the evidence base, or another role than before."""
    access.require(Action.MANAGE_MEMBERS)
    if role not in Role.values:
        raise Invalid.field("/role", "unknown-role", f"A role is one of {', '.join(Role.values)}.")
    person = Person.objects.filter(email=email.strip().lower(), is_active=True).first()
    if person is None:
        raise Invalid.field("/email", "unknown-person", f"Nobody here signs in as {email!r}.")
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.MEMBER_SET,
        summary=f"{person.name} is {Role(role).label.lower()}",
        subject={"person": person.pk},
        at=at,
    ) as change:
        membership, _ = Membership.objects.update_or_create(
            evidence_base=change.evidence_base, person=person, defaults={"role": role}
        )
        _keep_a_steward(change.evidence_base)
    return membership


def remove_member(*, access: Access, person_id: str) -> None:
    """End a person's membership; their tokens in this evidence base stop with it."""
    access.require(Action.MANAGE_MEMBERS)
    membership = Membership.objects.filter(evidence_base=access.evidence_base, person=person_id).first()
    if membership is None:
        raise NotHere("There is no such member here.")
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.MEMBER_REMOVED,
        summary=f"{membership.person.name} is no longer a member",
        subject={"person": membership.person_id},
    ) as change:
        membership.delete()
        _keep_a_steward(change.evidence_base)


def _keep_a_steward(base: EvidenceBase) -> None:
    # Runs under the base's row lock, so two stewards cannot step down at the same moment.
    if not Membership.objects.filter(evidence_base=base, role=Role.STEWARD).exists():
        raise Conflict("An evidence base needs at least one steward.", code="last-steward")


def check_slug(slug: str) -> None:
    if not SLUG.fullmatch(slug) or len(slug) > 80:
        raise Invalid.field(
            "/slug", "not-a-slug", "A slug is made of a–z, 0–9 and single hyphens between them, at most 80 characters."
        )
