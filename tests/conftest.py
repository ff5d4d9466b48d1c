"""What every test run stands on: its own database, its own folders, and nothing of the machine's.

An embedded PostgreSQL is started once per run and thrown away after it. Servers that happen to run on the
machine are used only where the person names them:

- `STEELYARD_TEST_DATABASE_URL`: run on this PostgreSQL instead of the embedded one (the account must be able
  to create databases); tests marked `postgres` need it.
- `STEELYARD_TEST_REDIS_URL`, `STEELYARD_TEST_RABBITMQ_URL`: for tests marked `redis` and `rabbitmq`.
- Tests marked `browser` need Chromium.

A test whose need is not met is skipped and listed at the end; with `STEELYARD_REQUIRE_ALL=1` (continuous
integration) the run is refused instead.
"""

from __future__ import annotations

import os
import secrets
import shutil
import tempfile
from pathlib import Path

import django
import pytest
import pytest_django
from django.db import connection

from config.services.postgresql import DISPOSABLE, EmbeddedPostgreSQL

# Not in pyproject.toml: pytest-django would then read the settings before the database below is started.
os.environ["DJANGO_SETTINGS_MODULE"] = "config.settings"

CHROMIUM_NAMES = ("chromium", "chromium-browser", "google-chrome")
NEEDS = {
    "browser": "needs Chromium (looked for: " + ", ".join(CHROMIUM_NAMES) + ")",
    "redis": "needs a Redis server named by STEELYARD_TEST_REDIS_URL",
    "rabbitmq": "needs a RabbitMQ server named by STEELYARD_TEST_RABBITMQ_URL",
    "postgres": "needs a PostgreSQL server named by STEELYARD_TEST_DATABASE_URL",
}

_FOLDER = pytest.StashKey[Path]()
_DATABASE = pytest.StashKey[EmbeddedPostgreSQL]()


def pytest_configure(config: pytest.Config) -> None:
    """Start the database and point Django at it, before pytest-django sets Django up."""
    # A worker of a parallel run inherits all of this from the process that started it.
    if not hasattr(config, "workerinput"):
        _prepare(config)
    django.setup()


def _prepare(config: pytest.Config) -> None:
    folder = Path(tempfile.mkdtemp(prefix="steelyard-test-"))
    config.stash[_FOLDER] = folder
    (folder / "static").mkdir()
    url = os.environ.get("STEELYARD_TEST_DATABASE_URL", "")
    if not url:
        # Beside the folder, not in it: the database's own account may have to enter it.
        database = EmbeddedPostgreSQL(Path(tempfile.mkdtemp(prefix="steelyard-test-db-")), settings=DISPOSABLE)
        config.stash[_DATABASE] = database
        database.start()
        database.ensure_database()
        url = database.url()
    # Assigned, not defaulted: what the person's shell says about a real installation must not reach tests.
    os.environ.update(
        {
            "DATABASE_URL": url,
            "SECRET_KEY": secrets.token_urlsafe(48),
            "CELERY_BROKER_URL": "filesystem://",
            "STEELYARD_DATA": str(folder),
            "STEELYARD_DATABASE_ROLE": "",
            "STEELYARD_DEBUG": "0",
            "STEELYARD_HASHED_STATIC": "0",
            "STEELYARD_HOSTS": "localhost,127.0.0.1,[::1],testserver",
            "STEELYARD_HTTPS": "0",
            "STEELYARD_STATIC_ROOT": str(folder / "static"),
            "STEELYARD_TRUSTED_ORIGINS": "",
        }
    )


def pytest_unconfigure(config: pytest.Config) -> None:
    """Stop the database and remove everything the run made."""
    database = config.stash.get(_DATABASE, None)
    if database is not None:
        database.remove()
    folder = config.stash.get(_FOLDER, None)
    if folder is not None:
        shutil.rmtree(folder)


def _missing_needs() -> set[str]:
    missing = set()
    if chromium_path() is None:
        missing.add("browser")
    for marker in ("redis", "rabbitmq"):
        if not os.environ.get(f"STEELYARD_TEST_{marker.upper()}_URL"):
            missing.add(marker)
    if not os.environ.get("STEELYARD_TEST_DATABASE_URL"):
        missing.add("postgres")
    return missing


def chromium_path() -> str | None:
    """Where Chromium is on this machine, if it is."""
    return next(filter(None, map(shutil.which, CHROMIUM_NAMES)), None)


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Skip, saying why, what this machine cannot run; or refuse the run where everything is required."""
    missing = _missing_needs()
    unmet: set[str] = set()
    for item in items:
        for marker in sorted(missing & {mark.name for mark in item.iter_markers()}):
            unmet.add(marker)
            item.add_marker(pytest.mark.skip(reason=NEEDS[marker]))
    if unmet and os.environ.get("STEELYARD_REQUIRE_ALL") == "1":
        told = "; ".join(f"{marker} {NEEDS[marker]}" for marker in sorted(unmet))
        raise pytest.UsageError(f"STEELYARD_REQUIRE_ALL is set and some tests cannot run: {told}.")


@pytest.fixture(scope="session")
def django_db_setup(django_db_setup: None, django_db_blocker: pytest_django.DjangoDbBlocker) -> None:
    """The test database, told to allow what a real one refuses: emptying whole tables between tests."""
    with django_db_blocker.unblock():
        with connection.cursor() as cursor:
            name = connection.ops.quote_name(connection.settings_dict["NAME"])
            cursor.execute(f"ALTER DATABASE {name} SET steelyard.allow_truncate = 'on'")
        # The setting holds for connections made from now on.
        connection.close()


@pytest.fixture(scope="session")
def chromium() -> str:
    """The path of Chromium, for tests marked `browser`."""
    path = chromium_path()
    assert path is not None, "a test that uses the browser must be marked so"
    return path


@pytest.fixture
def redis_url() -> str:
    """The Redis named for tests, for tests marked `redis`."""
    return os.environ["STEELYARD_TEST_REDIS_URL"]


@pytest.fixture
def rabbitmq_url() -> str:
    """The RabbitMQ named for tests, for tests marked `rabbitmq`."""
    return os.environ["STEELYARD_TEST_RABBITMQ_URL"]


@pytest.fixture
def postgres_url() -> str:
    """The PostgreSQL named for tests, for tests marked `postgres`."""
    return os.environ["STEELYARD_TEST_DATABASE_URL"]
