"""Load the invented evidence base: ``manage.py load_demo``. Safe to run again, also after it was cut off.

The people of the scenario sign in with the password in STEELYARD_DEMO_PASSWORD, or with one that is made up and
printed. The first of them, a steward, signs in as STEELYARD_DEMO_EMAIL (else demo@steelyard.example).
"""

import json
import secrets
import time
from typing import Any

from django.conf import settings
from django.core.management.base import BaseCommand, CommandError

from analysis.replay import Ending, replay
from evidence.errors import EvidenceError
from evidence.models import Person
from evidence.operations.people import create_person

HISTORY = settings.BASE_DIR / "fixtures" / "scenario" / "history.json"
DOMAIN = "steelyard.example"


class Command(BaseCommand):
    help = "Load the invented evidence base; running it again changes nothing."

    def handle(self, *args: Any, **options: Any) -> None:
        history = json.loads(HISTORY.read_text(encoding="utf-8"))
        began = time.monotonic()
        try:
            people = self._people(history["people"])
            done = replay(history["events"], people)
        except EvidenceError as error:
            raise CommandError(str(error)) from error
        name = history["events"][0]["name"]
        self.stdout.write(f"{name} {done.ending.value}.")
        if done.done:
            self.stdout.write(f"{done.done} changes replayed in {time.monotonic() - began:.1f} s.")
        if done.ending is Ending.OTHER_HISTORY:
            self.stdout.write("To load this one, start on an empty database (`make clean-demo` empties the demo's).")

    def _people(self, wanted: list[dict[str, str]]) -> dict[str, Person]:
        """The people of the scenario by their keys, created where they are not here yet."""
        given = settings.DEMO_PASSWORD
        password = given or secrets.token_urlsafe(12)
        people: dict[str, Person] = {}
        created = []
        for place, person in enumerate(wanted):
            first = settings.DEMO_EMAIL
            email = (first if place == 0 else f"{person['key']}@{DOMAIN}").strip().lower()
            found = Person.objects.filter(email=email).first()
            if found is None:
                found = create_person(
                    email=email, name=person["name"], password=password, may_create_evidence_bases=place == 0
                )
                created.append(email)
            people[person["key"]] = found
        if created:
            self.stdout.write(f"Can sign in: {', '.join(created)}")
            if not given:
                self.stdout.write(f"with the password {password}")
        return people
