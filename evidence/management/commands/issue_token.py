"""Issue a token for a program: ``manage.py issue_token EMAIL EVIDENCE_BASE NAME``."""

from argparse import ArgumentParser
from datetime import timedelta
from typing import Any

from django.core.management.base import BaseCommand, CommandError
from django.utils import timezone

from evidence.changes import Actor
from evidence.errors import EvidenceError
from evidence.models import Person
from evidence.operations.tokens import issue_token
from evidence.policy import enter, scopes_within
from evidence.vocabularies import Scope


class Command(BaseCommand):
    help = "Issue a token that acts for a person in one evidence base. It is printed once and kept nowhere."

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument("email")
        parser.add_argument("evidence_base")
        parser.add_argument("name", help="what the token is for")
        parser.add_argument("--scope", action="append", choices=Scope.values, help="default: all the role gives")
        parser.add_argument("--days", type=int, default=90, help="until it expires (default: 90)")

    def handle(self, *args: Any, **options: Any) -> None:
        person = Person.objects.filter(email=options["email"].strip().lower()).first()
        if person is None:
            raise CommandError(f"Nobody here signs in as {options['email']}.")
        try:
            access = enter(Actor(person), options["evidence_base"])
            issued = issue_token(
                access=access,
                name=options["name"],
                scopes=options["scope"] or sorted(scopes_within(access.role)),
                expires_at=timezone.now() + timedelta(days=options["days"]),
            )
        except EvidenceError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(issued.text)
