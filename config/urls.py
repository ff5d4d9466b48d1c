"""Addresses: the API under /api/v1/, the pages at the root, health probes, Django's admin."""

from __future__ import annotations

from django.contrib import admin
from django.urls import include, path

from api.views import problems
from config import health

urlpatterns = [
    path("health/live", health.live, name="health-live"),
    path("health/ready", health.ready, name="health-ready"),
    path("admin/", admin.site.urls),
    path("api/v1/", include("api.urls")),
    path("problems/", problems.codes, name="problems"),
    path("problems/<slug:name>/", problems.code, name="problem"),
    # The address as it stands in a problem's type.
    path("problems/<slug:name>", problems.code),
    path("", include("dashboard.urls")),
]

handler400 = "config.errors.bad_request"
handler403 = "config.errors.permission_denied"
handler404 = "config.errors.not_found"
handler500 = "config.errors.server_error"
