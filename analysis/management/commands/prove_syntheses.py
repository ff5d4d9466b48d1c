"""Recompute every stored synthesis from the register and say whether the numbers are the same.

``manage.py prove_syntheses [EVIDENCE_BASE]`` ends with status 1 when any differs.
"""

from argparse import ArgumentParser
from typing import Any

from django.core.management.base import BaseCommand, CommandError

from analysis.proof import prove
from evidence.models import EvidenceBase


class Command(BaseCommand):
    help = "Recompute every stored synthesis and report those that come out differently."

    def add_arguments(self, parser: ArgumentParser) -> None:
        parser.add_argument("evidence_base", nargs="?", help="its slug (default: all)")

    def handle(self, *args: Any, **options: Any) -> None:
        bases = EvidenceBase.objects.all()
        if options["evidence_base"]:
            bases = bases.filter(slug=options["evidence_base"])
            if not bases.exists():
                raise CommandError(f"There is no evidence base {options['evidence_base']}.")
        proved, different = 0, 0
        for verdict in prove(bases):
            proved += 1
            if verdict.differences:
                different += 1
                self.stdout.write(f"{verdict.digest[:16]}: {'; '.join(verdict.differences)}")
        self.stdout.write(f"{proved} syntheses recomputed, {proved - different} equal, {different} different")
        if different:
            raise CommandError("Some syntheses do not come out as they are stored.")
