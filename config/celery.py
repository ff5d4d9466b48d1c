"""The Celery application: the only job runner, its queue chosen by CELERY_BROKER_URL alone."""

from __future__ import annotations

import os

from celery import Celery

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "config.settings")

app = Celery("steelyard")
app.config_from_object("django.conf:settings", namespace="CELERY")
app.autodiscover_tasks()
