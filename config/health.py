"""Two probes for whoever supervises the processes: is this one alive, and can it serve now."""

from __future__ import annotations

import logging

from django.db import DatabaseError, connection
from django.db.migrations.executor import MigrationExecutor
from django.http import HttpRequest, JsonResponse
from django.views.decorators.cache import never_cache
from django.views.decorators.http import require_safe

logger = logging.getLogger(__name__)


@never_cache
@require_safe
def live(request: HttpRequest) -> JsonResponse:
    """200 as long as the process answers at all; touches nothing else."""
    return JsonResponse({"status": "live"})


@never_cache
@require_safe
def ready(request: HttpRequest) -> JsonResponse:
    """200 when the database answers and holds every migration; 503 with the missing part otherwise.

    The queue is left out on purpose: without it changes are still accepted and answers still read.
    """
    try:
        executor = MigrationExecutor(connection)
        pending = executor.migration_plan(executor.loader.graph.leaf_nodes())
    except DatabaseError:
        logger.exception("The database did not answer a readiness probe.")
        return JsonResponse({"status": "not-ready", "missing": "database"}, status=503)
    if pending:
        return JsonResponse({"status": "not-ready", "missing": "migrations"}, status=503)
    return JsonResponse({"status": "ready"})
