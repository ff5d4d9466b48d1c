"""Shared by the tests of the REST service."""

from collections.abc import Callable

import pytest


@pytest.fixture(autouse=True)
def rings(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """The numbers put on the queue; nothing is delivered."""
    from analysis import recompute

    sent: list[int] = []

    def note(request_id: int) -> bool:
        sent.append(request_id)
        return True

    monkeypatch.setattr(recompute, "ring", note)
    return sent


@pytest.fixture
def row_counts(db: None) -> Callable[[], dict[str, int]]:
    """How many rows every table of the register and of the conclusions holds."""
    from django.apps import apps

    models = [model for app in ("evidence", "analysis") for model in apps.get_app_config(app).get_models()]
    return lambda: {model._meta.db_table: model._default_manager.count() for model in models}
