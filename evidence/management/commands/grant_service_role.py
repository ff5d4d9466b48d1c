"""Give the running service's database role what it needs, and no more: ``manage.py grant_service_role ROLE``."""

from argparse import ArgumentParser
from typing import Any

from django.core.management.base import BaseCommand, CommandError

from evidence.privileges import grant_service_role


class Command(BaseCommand):
    help = "Create the role the service acts as, if missing, and grant it its privileges. Run after every migration."

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument("role")

    def handle(self, *args: Any, **options: Any) -> None:
        try:
            granted = grant_service_role(options["role"])
        except ValueError as error:
            raise CommandError(str(error)) from error
        guarded = sum("DELETE" not in privileges for privileges in granted.values())
        self.stdout.write(f"{options['role']} may use {len(granted)} tables, {guarded} of them without deleting")
