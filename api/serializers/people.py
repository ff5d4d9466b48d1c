"""Signing in, who one is, members and tokens."""

from rest_framework import serializers

from evidence.vocabularies import Role, Scope

from .common import PersonRef
from .fields import Instant, OneOf, Secret, Text
from .shapes import In, Out


class SignInIn(In):
    email = Text(254)
    password = Secret()


class PersonOut(PersonRef):
    """A person as they see themselves."""

    email = serializers.EmailField()
    may_create_evidence_bases = serializers.BooleanField()


class SignedInOut(Out):
    """A sign-in token, shown this once."""

    token = serializers.CharField(help_text="Send as `Authorization: Token <token>`.")
    expires_at = Instant()
    person = PersonOut()


class MembershipOut(Out):
    slug = serializers.CharField(source="evidence_base.slug")
    name = serializers.CharField(source="evidence_base.name")
    role = serializers.ChoiceField(Role.choices)


class TokenOut(Out):
    """A token without its secret, which only its holder has."""

    id = serializers.UUIDField()
    name = serializers.CharField()
    prefix = serializers.CharField(help_text="The public part, by which a token can be recognised.")
    owner = PersonRef()
    evidence_base = serializers.CharField(
        source="evidence_base.slug", allow_null=True, help_text="Null for a sign-in token."
    )
    scopes = serializers.ListField(child=serializers.ChoiceField(Scope.choices))
    created_at = Instant()
    expires_at = Instant(allow_null=True)
    last_used_at = Instant(allow_null=True, help_text="To the minute.")


class MeOut(Out):
    """Who asks, by which token, and where they belong."""

    person = PersonOut()
    token = TokenOut(allow_null=True)
    memberships = MembershipOut(many=True)


class TokenIn(In):
    name = Text(120)
    scopes = serializers.ListField(child=OneOf(Scope.choices), allow_empty=False, max_length=len(Scope))
    expires_at = Instant(required=False, allow_null=True)


class IssuedTokenOut(TokenOut):
    """A new token with its secret, shown this once."""

    token = serializers.CharField(help_text="Send as `Authorization: Token <token>`.")


class MemberOut(Out):
    person = PersonOut()
    role = serializers.ChoiceField(Role.choices)
    since = Instant()


class MemberIn(In):
    email = Text(254)
    role = OneOf(Role.choices)
