"""How the service is put together: settings, addresses, task application, and the runner that starts it."""

from config.celery import app as celery_app

__all__ = ["celery_app"]
