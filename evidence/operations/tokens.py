"""Tokens: issuing, recognising, revoking. The secret is shown once; only its SHA-256 is kept.

A token reads ``sy_<prefix>.<secret>`` with 256 random bits of secret, so a slow password hash would add cost and no
safety.
"""

import hashlib
import hmac
import re
import secrets
from collections.abc import Collection
from dataclasses import dataclass
from datetime import datetime, timedelta

from django.utils import timezone

from evidence.changes import Actor, recording
from evidence.errors import Invalid, NotHere, NotSignedIn
from evidence.models import Person, Token
from evidence.policy import Access, Action, scopes_within
from evidence.vocabularies import Scope, Verb

SIGN_IN_TOKEN_LIFETIME = timedelta(hours=12)
TOKEN_TEXT = re.compile(r"(sy_[0-9a-f]{10})\.([A-Za-z0-9_-]{43})", re.ASCII)
LAST_USE_RESOLUTION = timedelta(minutes=1)


@dataclass(frozen=True)
class IssuedToken:
    """A token and, this once, the text a program must send."""

    token: Token
    text: str


def sign_in_token(person: Person) -> IssuedToken:
    """A short-lived token that belongs to no evidence base (see ``Token``)."""
    return _make(
        person, name="Sign-in", evidence_base=None, scopes=[], expires_at=timezone.now() + SIGN_IN_TOKEN_LIFETIME
    )


def issue_token(
    *, access: Access, name: str, scopes: Collection[str], expires_at: datetime | None = None
) -> IssuedToken:
    """A token that acts for the caller in one evidence base, within the given scopes."""
    access.require(Action.MANAGE_TOKENS)
    within = scopes_within(access.role)
    if not scopes:
        raise Invalid.field("/scopes", "no-scope", "Name at least one scope; a token without any could do nothing.")
    for place, scope in enumerate(scopes):
        if scope not in Scope.values:
            raise Invalid.field(f"/scopes/{place}", "unknown-scope", f"There is no scope {scope!r}.")
        if scope not in within:
            raise Invalid.field(
                f"/scopes/{place}", "scope-beyond-role", f"A {access.role.label.lower()} cannot hand on {scope!r}."
            )
    if expires_at is not None and expires_at <= timezone.now():
        raise Invalid.field("/expires_at", "already-expired", "The token would have expired already.")
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.TOKEN_ISSUED,
        summary=f"Token “{name}” issued to {access.actor.person.name}",
        subject={"person": access.actor.person.pk},
    ):
        return _make(
            access.actor.person,
            name=name,
            evidence_base=access.evidence_base,
            scopes=sorted(set(scopes)),
            expires_at=expires_at,
        )


def revoke_token(*, access: Access, token_id: str) -> Token:
    """End a token at once. One's own, or anyone's in the evidence base for who manages members."""
    access.require(Action.MANAGE_TOKENS)
    tokens = Token.objects.filter(evidence_base=access.evidence_base, revoked_at__isnull=True)
    if not access.allows(Action.MANAGE_MEMBERS):
        tokens = tokens.filter(owner=access.actor.person)
    token = tokens.filter(pk=token_id).first()
    if token is None:
        raise NotHere("There is no such token here.")
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.TOKEN_REVOKED,
        summary=f"Token “{token.name}” revoked",
        subject={"token": token.pk},
    ) as change:
        token.revoked_at = change.at
        token.save(update_fields=["revoked_at"])
    return token


def authenticate(text: str) -> Actor:
    """The actor a token stands for, or ``NotSignedIn``.

    Unknown, revoked, expired, of an inactive person and of someone who has left the evidence base all answer alike.
    """
    shaped = TOKEN_TEXT.fullmatch(text)
    prefix, secret = shaped.groups() if shaped is not None else ("", "")
    token = Token.objects.select_related("owner", "evidence_base").filter(prefix=prefix).first() if shaped else None
    now = timezone.now()
    if (
        token is None
        or not hmac.compare_digest(token.secret_sha256, _digest(secret))
        or token.revoked_at is not None
        or (token.expires_at is not None and token.expires_at <= now)
        or not token.owner.is_active
    ):
        raise NotSignedIn("The token is not valid here: it may have expired or been revoked.", code="token-not-valid")
    if token.last_used_at is None or now - token.last_used_at > LAST_USE_RESOLUTION:
        Token.objects.filter(pk=token.pk).update(last_used_at=now)
    return Actor(token.owner, token)


def _digest(secret: str) -> str:
    return hashlib.sha256(secret.encode()).hexdigest()


def _make(person: Person, **fields: object) -> IssuedToken:
    prefix = "sy_" + secrets.token_hex(5)
    secret = secrets.token_urlsafe(32)
    token = Token.objects.create(owner=person, prefix=prefix, secret_sha256=_digest(secret), **fields)
    return IssuedToken(token, f"{prefix}.{secret}")
