"""The Celery application: the only job runner, its queue chosen by CELERY_BROKER_URL alone."""

from __future__ import annotations

import os

from celery import Celery
from celery.signals import worker_init
from kombu.transport import TRANSPORT_ALIASES

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "config.settings")

TRANSPORT_ALIASES["filesystem"] = "config.file_queue:Transport"

app = Celery("steelyard")
app.config_from_object("django.conf:settings", namespace="CELERY")
app.autodiscover_tasks()


@worker_init.connect
def load_kernels(**_: object) -> None:
    """Load the compiled kernels before the worker forks, so that no job waits for them."""
    from analysis.methods.warm import compile_all

    compile_all()
