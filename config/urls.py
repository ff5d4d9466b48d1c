"""Addresses: the API under /api/v1/, the pages at the root, health probes, Django's admin."""

from __future__ import annotations

from importlib.util import find_spec

from django.contrib import admin
from django.urls import include, path

from config import health

urlpatterns = [
    path("health/live", health.live, name="health-live"),
    path("health/ready", health.ready, name="health-ready"),
    path("admin/", admin.site.urls),
]
# Until each of the two packages has its addresses.
if find_spec("api.urls"):
    urlpatterns.append(path("api/v1/", include("api.urls")))
if find_spec("dashboard.urls"):
    urlpatterns.append(path("", include("dashboard.urls")))

handler400 = "config.errors.bad_request"
handler403 = "config.errors.permission_denied"
handler404 = "config.errors.not_found"
handler500 = "config.errors.server_error"
