"""Django's entry for the API."""

from django.apps import AppConfig


class ApiConfig(AppConfig):
    name = "api"
