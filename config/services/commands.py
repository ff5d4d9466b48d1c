"""The one place that says how each process of the service is started: web, worker, scheduler, management commands.

The demo, the end-to-end tests and the containers all use these, so what is tested is what runs.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping

from config import environment

# The task worker finishes what it is doing for this long after being asked to stop, then puts it back.
WORKER_STOP_SECONDS = 30.0
WEB_STOP_SECONDS = 35.0


def web(*, address: str, processes: int, threads: int = 4) -> list[str]:
    """The web server: processes of a few threads each, renewed now and then so that nothing grows for ever."""
    return [
        *(sys.executable, "-m", "gunicorn", "config.wsgi:application"),
        *("--bind", address),
        *("--worker-class", "gthread", "--workers", str(processes), "--threads", str(threads)),
        *("--max-requests", "2000", "--max-requests-jitter", "200"),
        *("--timeout", "60", "--graceful-timeout", "30", "--keep-alive", "5"),
        *("--access-logfile", "-", "--error-logfile", "-"),
        # It would stand in the home folder, shared by every web server of this account.
        "--no-control-socket",
    ]


def worker(*, processes: int) -> list[str]:
    """The task worker: prefork, so that a crash of one calculation takes no other with it."""
    return [
        *(sys.executable, "-m", "celery", "--app", "config", "worker"),
        *("--pool", "prefork", "--concurrency", str(processes)),
        *("--without-gossip", "--without-mingle", "--loglevel", "INFO"),
    ]


def scheduler() -> list[str]:
    """The scheduler: rings the periodic sweep. Run one; a second does no harm."""
    # No process-number file: a stale one would stop the next start after a crash.
    return [
        *(sys.executable, "-m", "celery", "--app", "config", "beat"),
        *("--pidfile", "", "--loglevel", "INFO"),
    ]


def manage(*arguments: str) -> list[str]:
    """A management command."""
    return [sys.executable, str(environment.PROJECT_FOLDER / "manage.py"), *arguments]


def process_environment(base: Mapping[str, str]) -> dict[str, str]:
    """What every process of the service needs to find in its environment, added to a base."""
    return {
        **base,
        "PYTHONUNBUFFERED": "1",
        # Celery's soft shutdown: on SIGTERM running tasks may finish, and what does not finish is put back.
        "REMAP_SIGTERM": "SIGQUIT",
        # One thread for linear algebra in each process: the processes are the parallelism.
        "OMP_NUM_THREADS": "1",
        "OPENBLAS_NUM_THREADS": "1",
    }
