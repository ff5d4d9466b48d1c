"""Persons, what they may do in which evidence base, and the tokens that let programs act for them."""

from typing import Any

from django.contrib.auth.base_user import AbstractBaseUser, BaseUserManager
from django.contrib.auth.models import PermissionsMixin
from django.contrib.postgres.fields import ArrayField
from django.db import models
from django.db.models import Q
from django.db.models.functions import Lower

from evidence.identifiers import new_id
from evidence.vocabularies import Role, Scope

from .bases import EvidenceBase


class PersonManager(BaseUserManager["Person"]):
    def create_user(self, email: str, password: str | None = None, **fields: Any) -> "Person":
        person = self.model(email=self.normalize_email(email).lower(), **fields)
        person.set_password(password)
        person.full_clean()
        person.save(using=self._db)
        return person

    def create_superuser(self, email: str, password: str | None = None, **fields: Any) -> "Person":
        return self.create_user(
            email, password, is_staff=True, is_superuser=True, may_create_evidence_bases=True, **fields
        )


class Person(AbstractBaseUser, PermissionsMixin):
    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    email = models.EmailField(unique=True)
    name = models.CharField(max_length=120)
    is_active = models.BooleanField(default=True)
    is_staff = models.BooleanField(default=False, help_text="May open the admin site.")
    may_create_evidence_bases = models.BooleanField(default=False)
    created_at = models.DateTimeField(auto_now_add=True)

    objects = PersonManager()

    USERNAME_FIELD = "email"
    REQUIRED_FIELDS = ["name"]

    class Meta:
        ordering = ["email"]
        verbose_name_plural = "people"
        constraints = [
            models.UniqueConstraint(Lower("email"), name="one_person_per_email_whatever_the_case"),
            models.CheckConstraint(condition=Q(name__length__gt=0), name="person_has_a_name"),
        ]

    def __str__(self) -> str:
        return self.name

    def get_full_name(self) -> str:
        return self.name

    def get_short_name(self) -> str:
        return self.name


class Membership(models.Model):
    """A person's role in an evidence base."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="memberships")
    person = models.ForeignKey(Person, on_delete=models.PROTECT, related_name="memberships")
    role = models.CharField(max_length=10, choices=Role.choices)
    since = models.DateTimeField(auto_now_add=True)

    class Meta:
        ordering = ["evidence_base", "person"]
        constraints = [
            models.UniqueConstraint(fields=["evidence_base", "person"], name="one_role_per_person_and_base"),
            models.CheckConstraint(condition=Q(role__in=Role.values), name="role_is_known"),
        ]

    def __str__(self) -> str:
        return f"{self.person} as {self.role} of {self.evidence_base}"


class Token(models.Model):
    """A secret that lets a program act for its owner. Only the secret's hash is kept.

    Without an evidence base it is a sign-in token: good for listing and creating evidence bases and for issuing
    tokens that act in one, and for nothing else.
    """

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    prefix = models.CharField(max_length=16, unique=True, help_text="Public part, by which a token is found and named.")
    secret_sha256 = models.CharField(max_length=64)
    owner = models.ForeignKey(Person, on_delete=models.PROTECT, related_name="tokens")
    evidence_base = models.ForeignKey(EvidenceBase, null=True, on_delete=models.PROTECT, related_name="tokens")
    name = models.CharField(max_length=120)
    scopes = ArrayField(models.CharField(max_length=10, choices=Scope.choices), default=list)
    created_at = models.DateTimeField(auto_now_add=True)
    expires_at = models.DateTimeField(null=True, help_text="NULL: until revoked.")
    last_used_at = models.DateTimeField(null=True, help_text="To the minute.")
    revoked_at = models.DateTimeField(null=True)

    class Meta:
        ordering = ["-created_at", "id"]
        constraints = [
            models.CheckConstraint(
                condition=Q(("secret_sha256__regex", r"^[0-9a-f]{64}$")), name="token_secret_is_a_sha256"
            ),
            models.CheckConstraint(
                condition=Q(evidence_base__isnull=False) | Q(expires_at__isnull=False),
                name="sign_in_token_expires",
            ),
        ]

    def __str__(self) -> str:
        return f"{self.name} ({self.prefix})"


class SignInFailure(models.Model):
    """A failed sign-in, kept for the throttle and swept after it no longer counts."""

    email = models.CharField(max_length=254)
    address = models.CharField(max_length=64)
    failed_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        indexes = [
            models.Index(fields=["email", "failed_at"], name="failures_by_email"),
            models.Index(fields=["address", "failed_at"], name="failures_by_address"),
        ]

    def __str__(self) -> str:
        return f"failed sign-in of {self.email}"
