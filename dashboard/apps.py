"""Django's entry for the pages."""

from django.apps import AppConfig


class DashboardConfig(AppConfig):
    name = "dashboard"
