"""The project as a whole: its migrations, its production settings, its addresses."""

from __future__ import annotations

import pytest
from django.core.management import call_command


@pytest.mark.django_db
def test_no_model_has_changed_without_a_migration() -> None:
    call_command("makemigrations", check=True, dry_run=True, verbosity=0)
