"""The Celery application: the only job runner, its queue chosen by CELERY_BROKER_URL alone."""

from __future__ import annotations

import os

from celery import Celery
from kombu.transport import TRANSPORT_ALIASES

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "config.settings")

TRANSPORT_ALIASES["filesystem"] = "config.file_queue:Transport"

app = Celery("steelyard")
app.config_from_object("django.conf:settings", namespace="CELERY")
app.autodiscover_tasks()
