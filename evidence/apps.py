"""Django's entry for the evidence package."""

from django.apps import AppConfig


class EvidenceConfig(AppConfig):
    name = "evidence"
    default_auto_field = "django.db.models.BigAutoField"
