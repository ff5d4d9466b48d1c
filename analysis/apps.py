"""Django's entry for the analysis package; connects recompute requests to the register's changes."""

from django.apps import AppConfig


class AnalysisConfig(AppConfig):
    name = "analysis"
    default_auto_field = "django.db.models.BigAutoField"

    def ready(self) -> None:
        from evidence.changes import when_questions_change

        from .recompute import request_recomputes

        when_questions_change(request_recomputes)
