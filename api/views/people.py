"""Signing in, who one is, members and tokens."""

from http import HTTPStatus
from uuid import UUID

from django.db.models import QuerySet
from rest_framework.request import Request
from rest_framework.response import Response

from api.pagination import BY_ID
from api.permissions import Anyone, SignedIn
from api.schema import operation
from api.serializers.common import path_to
from api.serializers.people import (
    IssuedTokenOut,
    MemberIn,
    MemberOut,
    MeOut,
    SignedInOut,
    SignInIn,
    TokenIn,
    TokenOut,
)
from evidence.models import Membership, Token
from evidence.operations.bases import remove_member, set_member
from evidence.operations.people import sign_in
from evidence.operations.tokens import IssuedToken, issue_token, revoke_token, sign_in_token
from evidence.policy import Access, Action, visible_bases

from .base import EvidenceBaseView, ServiceView


class SignIn(ServiceView):
    """A sign-in token for an e-mail and a password."""

    authentication_classes = ()
    permission_classes = (Anyone,)

    @operation(
        "Sign in",
        name="sign_in",
        takes=SignInIn,
        gives=SignedInOut,
        status=HTTPStatus.CREATED,
        refuses=("sign-in-failed", "too-many-tries"),
        example={"email": "ada@example.org", "password": "a long enough pass phrase"},
        public=True,
    )
    def post(self, request: Request) -> Response:
        given = self.accepted(SignInIn)
        person = sign_in(**given, address=request.META.get("REMOTE_ADDR", ""))
        issued = sign_in_token(person)
        body = {"token": issued.text, "expires_at": issued.token.expires_at, "person": person}
        return Response(SignedInOut(body).data, status=HTTPStatus.CREATED, headers={"Cache-Control": "no-store"})

    def get_authenticate_header(self, request: Request) -> str:
        return 'Token realm="Steelyard"'


class Me(ServiceView):
    """Who asks, by which token, and in which evidence bases they have a role."""

    permission_classes = (SignedIn,)

    @operation("Who am I", name="read_me", gives=MeOut)
    def get(self, request: Request) -> Response:
        memberships = Membership.objects.filter(
            person=self.actor.person, evidence_base__in=visible_bases(self.actor)
        ).select_related("evidence_base")
        body = {"person": self.actor.person, "token": self.actor.token, "memberships": memberships}
        return Response(MeOut(body).data)


class Members(EvidenceBaseView):
    """Who belongs to an evidence base, as it is now."""

    actions = {"GET": Action.READ, "POST": Action.MANAGE_MEMBERS}
    has_history = False
    is_list = True

    @operation("List members", name="list_members", gives=MemberOut, pages=True)
    def get(self, request: Request, base: str) -> Response:
        members = Membership.objects.filter(evidence_base=self.access.evidence_base).select_related("person")
        return self.page(MemberOut, members, BY_ID)

    @operation(
        "Add a member or change a role",
        name="set_member",
        takes=MemberIn,
        gives=MemberOut,
        refuses=("unknown-person", "last-steward"),
        example={"email": "grace@example.org", "role": "reviewer"},
    )
    def post(self, request: Request, base: str) -> Response:
        given = self.accepted(MemberIn)
        member = set_member(access=self.access, **given)
        return Response(MemberOut(member).data)


class OneMember(EvidenceBaseView):
    """A member, by their person's identifier."""

    actions = {"DELETE": Action.MANAGE_MEMBERS}
    has_history = False

    @operation(
        "Remove a member", name="remove_member", gives=None, status=HTTPStatus.NO_CONTENT, refuses=("last-steward",)
    )
    def delete(self, request: Request, base: str, id: UUID) -> Response:
        remove_member(access=self.access, person_id=str(id))
        return Response(status=HTTPStatus.NO_CONTENT)


class Tokens(EvidenceBaseView):
    """Tokens that act in an evidence base: one's own, or everyone's for who manages members."""

    actions = {"GET": Action.MANAGE_TOKENS, "POST": Action.MANAGE_TOKENS}
    has_history = False
    is_list = True

    @operation("List tokens", name="list_tokens", gives=TokenOut, pages=True)
    def get(self, request: Request, base: str) -> Response:
        return self.page(TokenOut, _tokens_shown_to(self.access), BY_ID)

    @operation(
        "Issue a token",
        name="issue_token",
        takes=TokenIn,
        gives=IssuedTokenOut,
        status=HTTPStatus.CREATED,
        refuses=("scope-beyond-role", "already-expired"),
        example={"name": "Nightly import", "scopes": ["read", "code"], "expires_at": "2027-01-01T00:00:00Z"},
    )
    def post(self, request: Request, base: str) -> Response:
        given = self.accepted(TokenIn)
        issued = issue_token(access=self.access, **given)
        location = path_to("token", base, id=issued.token.pk)
        return Response(
            _with_secret(issued), HTTPStatus.CREATED, headers={"Cache-Control": "no-store", "Location": location}
        )


class OneToken(EvidenceBaseView):
    """A token of an evidence base."""

    actions = {"DELETE": Action.MANAGE_TOKENS}
    has_history = False

    @operation("Revoke a token", name="revoke_token", gives=None, status=HTTPStatus.NO_CONTENT)
    def delete(self, request: Request, base: str, id: UUID) -> Response:
        revoke_token(access=self.access, token_id=str(id))
        return Response(status=HTTPStatus.NO_CONTENT)


def _tokens_shown_to(access: Access) -> QuerySet[Token]:
    tokens = Token.objects.filter(evidence_base=access.evidence_base, revoked_at__isnull=True)
    if not access.allows(Action.MANAGE_MEMBERS):
        tokens = tokens.filter(owner=access.actor.person)
    return tokens.select_related("owner", "evidence_base")


def _with_secret(issued: IssuedToken) -> dict[str, object]:
    return {**TokenOut(issued.token).data, "token": issued.text}
