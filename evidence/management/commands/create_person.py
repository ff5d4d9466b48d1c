"""Create a person who can sign in: ``manage.py create_person EMAIL NAME``; the password comes from standard input."""

import getpass
import sys
from argparse import ArgumentParser
from typing import Any

from django.core.management.base import BaseCommand, CommandError

from evidence.errors import EvidenceError
from evidence.operations.people import create_person


class Command(BaseCommand):
    help = "Create a person who can sign in. The password is read from standard input, never from an argument."

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument("email")
        parser.add_argument("name")
        parser.add_argument(
            "--may-create-evidence-bases", action="store_true", help="let them create evidence bases of their own"
        )

    def handle(self, *args: Any, **options: Any) -> None:
        password = getpass.getpass() if sys.stdin.isatty() else sys.stdin.readline().rstrip("\n")
        try:
            person = create_person(
                email=options["email"],
                name=options["name"],
                password=password,
                may_create_evidence_bases=options["may_create_evidence_bases"],
            )
        except EvidenceError as error:
            raise CommandError(error.detail) from error
        self.stdout.write(f"{person.name} can sign in as {person.email}")
