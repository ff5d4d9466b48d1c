"""Persons and their sign-in."""

import secrets
from datetime import timedelta
from functools import cache

from django.contrib.auth.hashers import check_password, make_password
from django.contrib.auth.password_validation import validate_password
from django.core.exceptions import ValidationError
from django.db import transaction
from django.utils import timezone

from evidence.errors import FieldProblem, Invalid, NotSignedIn, TooManyTries
from evidence.models import Person, SignInFailure

FAILURES_ALLOWED_PER_EMAIL = 8
FAILURES_ALLOWED_PER_ADDRESS = 40
FAILURE_WINDOW = timedelta(minutes=15)


@transaction.atomic(durable=True)
def create_person(*, email: str, name: str, password: str, may_create_evidence_bases: bool = False) -> Person:
    """A new person who can sign in. Refuses a weak password and an address already here."""
    person = Person(
        email=Person.objects.normalize_email(email).strip().lower(),
        name=name.strip(),
        may_create_evidence_bases=may_create_evidence_bases,
    )
    try:
        validate_password(password, person)
    except ValidationError as error:
        raise Invalid.field("/password", "password-too-weak", " ".join(error.messages)) from error
    person.password = make_password(password)
    try:
        person.full_clean()
    except ValidationError as error:
        raise Invalid(
            [
                FieldProblem(f"/{name}", "not-acceptable-value", " ".join(messages))
                for name, messages in error.message_dict.items()
            ]
        ) from error
    person.save()
    return person


def sign_in(*, email: str, password: str, address: str) -> Person:
    """The person with this e-mail and password.

    Repeated failures, by e-mail or by network address, are refused for a quarter of an hour without looking at the
    password. An unknown e-mail takes as long as a wrong password.
    """
    # PostgreSQL text cannot hold NUL, and no address contains one.
    email = email.strip().lower()[:254].replace("\0", "")
    address = address[:64]
    now = timezone.now()
    recent = SignInFailure.objects.filter(failed_at__gt=now - FAILURE_WINDOW)
    if (
        recent.filter(email=email).count() >= FAILURES_ALLOWED_PER_EMAIL
        or recent.filter(address=address).count() >= FAILURES_ALLOWED_PER_ADDRESS
    ):
        raise TooManyTries(
            "Too many sign-ins have failed. Wait a quarter of an hour and try again.",
            retry_after_seconds=int(FAILURE_WINDOW.total_seconds()),
        )
    person = Person.objects.filter(email=email).first()
    stored = person.password if person is not None else _nobodys_password()
    if not check_password(password, stored) or person is None or not person.is_active:
        SignInFailure.objects.create(email=email, address=address)
        raise NotSignedIn("E-mail and password do not match.", code="sign-in-failed")
    SignInFailure.objects.filter(email=email).delete()
    Person.objects.filter(pk=person.pk).update(last_login=now)
    return person


def forget_old_failures() -> int:
    """Delete failures that no longer count; returns how many."""
    stale = SignInFailure.objects.filter(failed_at__lte=timezone.now() - FAILURE_WINDOW)
    return stale.delete()[0]


@cache
def _nobodys_password() -> str:
    """A hash to check against when the e-mail is unknown, so that strangers cost the same time as members."""
    return make_password(secrets.token_urlsafe(32))
