"""The real thing under test: web server, task worker and scheduler as processes, on a database of their own.

    with running_service(broker="filesystem://") as service:
        answer = service.call("POST", "/api/v1/sign-in/", {"email": ..., "password": ...})
        service.kill_worker()
        service.start_worker()

The processes are started by the same commands as in the demo and in the containers (`config.services.commands`).
"""

from __future__ import annotations

import json
import os
import secrets
import shutil
import socket
import subprocess
import tempfile
import time
import urllib.error
import urllib.request
from collections.abc import Callable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from email.message import Message
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit, urlunsplit

import psycopg
from kombu import Connection, Exchange, Queue
from psycopg import sql

from config.services import commands
from config.services.postgresql import DISPOSABLE, EmbeddedPostgreSQL
from config.services.processes import Child, Watchdog, start, wait_until

START_SECONDS = 90
ANSWER_SECONDS = 60


@dataclass(frozen=True)
class HttpAnswer:
    """What came back: status, headers, and the body read as JSON where it is JSON."""

    status: int
    headers: Message
    body: bytes

    @property
    def json(self) -> Any:
        return json.loads(self.body)


@dataclass
class RunningService:
    """The started processes and the ways to use and to mistreat them."""

    base_url: str
    database_url: str
    broker_url: str
    folder: Path
    environment: dict[str, str]
    worker_processes: int
    watchdog: Watchdog
    queue_name: str
    web: Child | None = None
    scheduler: Child | None = None
    workers: list[Child] = field(default_factory=list)

    # --- Using it ---------------------------------------------------------------------------------------------

    def call(
        self,
        method: str,
        path: str,
        body: Any = None,
        *,
        token: str = "",
        headers: Mapping[str, str] | None = None,
    ) -> HttpAnswer:
        """One HTTP request; any status is an answer, only a broken connection raises."""
        request = urllib.request.Request(self.base_url + path, method=method)
        request.add_header("Accept", "application/json")
        if body is not None:
            request.data = body if isinstance(body, bytes) else json.dumps(body).encode()
            request.add_header("Content-Type", "application/json")
        if token:
            request.add_header("Authorization", f"Token {token}")
        for name, value in (headers or {}).items():
            request.add_header(name, value)
        # Never through a proxy that the machine's environment may name.
        opener = urllib.request.build_opener(urllib.request.ProxyHandler({}))
        try:
            with opener.open(request, timeout=ANSWER_SECONDS) as answer:
                return HttpAnswer(answer.status, answer.headers, answer.read())
        except urllib.error.HTTPError as error:
            with error:
                return HttpAnswer(error.code, error.headers, error.read())

    def manage(self, *arguments: str, stdin: str = "", extra: Mapping[str, str] | None = None) -> str:
        """Run a management command in the service's environment and return what it printed."""
        completed = subprocess.run(
            commands.manage(*arguments),
            env=self.environment | dict(extra or {}),
            input=stdin,
            capture_output=True,
            text=True,
            check=False,
        )
        assert completed.returncode == 0, f"manage.py {arguments[0]} failed:\n{completed.stdout}{completed.stderr}"
        return completed.stdout

    def query(self, statement: str, parameters: Any = None) -> list[tuple[Any, ...]]:
        """Rows straight from the service's database, underneath everything it says about itself."""
        with psycopg.connect(self.database_url, autocommit=True) as connection:
            return connection.execute(statement, parameters).fetchall()

    def wait_for[T](self, ask: Callable[[], T | None], *, seconds: float = ANSWER_SECONDS, what: str = "") -> T:
        """Ask until there is something, or fail with the processes' logs."""
        deadline = time.monotonic() + seconds
        while True:
            found = ask()
            if found:
                return found
            if time.monotonic() > deadline:
                raise AssertionError(f"Waited {seconds:g} s in vain for {what or ask}.")
            time.sleep(0.05)

    # --- Mistreating it ---------------------------------------------------------------------------------------

    def start_worker(self) -> Child:
        """Start one more task worker."""
        worker = self._start(
            f"worker-{len(list(self.folder.glob('worker-*.log'))) + 1}",
            [*commands.worker(processes=self.worker_processes), "--hostname", f"{secrets.token_hex(4)}@%h"],
            grace_seconds=commands.WORKER_STOP_SECONDS,
        )
        self.workers.append(worker)
        return worker

    def kill_worker(self) -> None:
        """SIGKILL every worker with all its children, as a machine that loses power would."""
        for worker in self.workers:
            worker.kill()
            self.watchdog.release(worker)
        self.workers.clear()

    def stop_worker(self) -> None:
        """Stop every worker politely."""
        for worker in self.workers:
            worker.stop()
            self.watchdog.release(worker)
        self.workers.clear()

    def queue_length(self) -> int:
        """How many messages wait in the queue."""
        with self._queue() as queue:
            return int(queue.queue_declare(passive=False).message_count)

    def empty_queue(self) -> None:
        """Throw away everything the queue holds, including what it keeps for messages being worked on."""
        if self.broker_url.startswith("redis"):
            self._delete_redis_keys()
            return
        with self._queue() as queue:
            queue.purge()

    def _delete_redis_keys(self) -> None:
        import redis

        with redis.Redis.from_url(self.broker_url) as client:
            for key in client.scan_iter(match=f"{self.queue_name}:*"):
                client.delete(key)

    @contextmanager
    def _queue(self) -> Iterator[Any]:
        # Whatever transport is configured, by the same settings as the service's own.
        import config.celery  # noqa: F401  (makes `filesystem://` the project's file-backed queue)

        options: dict[str, Any] = {}
        if self.broker_url.startswith("filesystem"):
            messages = str(self.folder / "queue" / "messages")
            options = {
                "data_folder_in": messages,
                "data_folder_out": messages,
                "control_folder": str(self.folder / "queue" / "control"),
            }
        elif self.broker_url.startswith("redis"):
            options = {"global_keyprefix": f"{self.queue_name}:"}
        with Connection(self.broker_url, transport_options=options) as connection:
            exchange = Exchange(self.queue_name, type="direct")
            yield Queue(self.queue_name, exchange, routing_key=self.queue_name)(connection.default_channel)

    # --- Starting and stopping --------------------------------------------------------------------------------

    def start_web(self, *, processes: int) -> None:
        """Start the web server and wait until it can serve."""
        address = urlsplit(self.base_url).netloc
        self.web = self._start(
            "web", commands.web(address=address, processes=processes), grace_seconds=commands.WEB_STOP_SECONDS
        )
        assert wait_until(self._is_ready, seconds=START_SECONDS), f"not ready:\n{self.logs()}"

    def start_scheduler(self) -> None:
        """Start the scheduler."""
        self.scheduler = self._start("scheduler", commands.scheduler(), grace_seconds=10)

    def _is_ready(self) -> bool:
        assert self.web is not None
        assert self.web.is_running(), f"the web server ended:\n{self.logs()}"
        try:
            return self.call("GET", "/health/ready").status == 200
        except (urllib.error.URLError, ConnectionError):
            return False

    def _start(self, name: str, command: list[str], *, grace_seconds: float) -> Child:
        with (self.folder / f"{name}.log").open("ab") as log:
            child = start(name, command, environment=self.environment, log=log, grace_seconds=grace_seconds)
        self.watchdog.guard(child)
        return child

    def stop(self) -> None:
        """Stop every process."""
        running = [child for child in (self.scheduler, self.web, *self.workers) if child is not None]
        for child in running:
            child.ask_to_stop()
        for child in running:
            child.wait_or_kill()
            self.watchdog.release(child)
        self.web = self.scheduler = None
        self.workers.clear()

    def forget_queue(self) -> None:
        """Leave nothing of this run in a shared Redis or RabbitMQ."""
        if self.broker_url.startswith("redis"):
            self._delete_redis_keys()
        elif self.broker_url.startswith(("amqp", "pyamqp")):
            with self._queue() as queue:
                queue.delete()
                queue.exchange(queue.channel).delete()

    def logs(self, lines: int = 40) -> str:
        """The last lines that each process wrote."""
        told = []
        for path in sorted(self.folder.glob("*.log")):
            last = path.read_text(encoding="utf-8", errors="replace").splitlines()[-lines:]
            told.append("\n".join([f"--- {path.name}", *last]))
        return "\n".join(told)


@contextmanager
def running_service(
    *,
    broker: str = "filesystem://",
    database_url: str | None = None,
    workers: int = 1,
    worker_processes: int = 2,
    web_processes: int = 1,
    scheduler: bool = True,
    sweep_interval_seconds: int = 1,
    environment: Mapping[str, str] | None = None,
) -> Iterator[RunningService]:
    """Start the service on a fresh database and a fresh data folder; stop and remove everything afterwards.

    The database is made on the server of `database_url`, else of DATABASE_URL (which the test run sets), else on an
    embedded one started for this alone.
    """
    with ExitStack() as stack:
        folder = Path(tempfile.mkdtemp(prefix="steelyard-service-"))
        stack.callback(shutil.rmtree, folder)
        server_url = database_url or os.environ.get("DATABASE_URL") or stack.enter_context(_embedded_server())
        fresh_url = stack.enter_context(_fresh_database(server_url))
        watchdog = stack.enter_context(Watchdog())
        queue_name = f"steelyard-test-{secrets.token_hex(4)}"
        port = _free_port()
        inherited = {
            name: value
            for name, value in os.environ.items()
            if not name.startswith(("PG", "STEELYARD_", "COV_", "PYTEST_"))
        }
        own = {
            "DATABASE_URL": fresh_url,
            "CELERY_BROKER_URL": broker,
            "DJANGO_SETTINGS_MODULE": "config.settings",
            "SECRET_KEY": secrets.token_urlsafe(48),
            "STEELYARD_DATA": str(folder),
            "STEELYARD_HOSTS": "127.0.0.1",
            "STEELYARD_HTTPS": "0",
            "STEELYARD_QUEUE": queue_name,
            "STEELYARD_STATIC_ROOT": str(folder / "static"),
            "STEELYARD_SWEEP_INTERVAL_SECONDS": str(sweep_interval_seconds),
        }
        service = RunningService(
            base_url=f"http://127.0.0.1:{port}",
            database_url=fresh_url,
            broker_url=broker,
            folder=folder,
            environment=commands.process_environment(inherited | own | dict(environment or {})),
            worker_processes=worker_processes,
            watchdog=watchdog,
            queue_name=queue_name,
        )
        service.manage("migrate", "--no-input", "--verbosity", "0")
        # From here on as in an installation: the processes act as a role that cannot rewrite history.
        role = stack.enter_context(_service_role(service, fresh_url))
        service.environment["STEELYARD_DATABASE_ROLE"] = role
        service.manage("collectstatic", "--no-input", "--verbosity", "0")
        stack.callback(service.forget_queue)
        stack.callback(service.stop)
        for _ in range(workers):
            service.start_worker()
        if scheduler:
            service.start_scheduler()
        service.start_web(processes=web_processes)
        try:
            yield service
        except BaseException:
            print(service.logs())
            raise


@contextmanager
def _embedded_server() -> Iterator[str]:
    server = EmbeddedPostgreSQL(Path(tempfile.mkdtemp(prefix="steelyard-service-db-")), settings=DISPOSABLE)
    server.start()
    try:
        yield server.url("postgres")
    finally:
        server.remove()


@contextmanager
def _fresh_database(server_url: str) -> Iterator[str]:
    name = f"steelyard_service_{secrets.token_hex(6)}"
    with psycopg.connect(server_url, autocommit=True) as connection:
        connection.execute(sql.SQL("CREATE DATABASE {} TEMPLATE template0").format(sql.Identifier(name)))
    try:
        yield urlunsplit(urlsplit(server_url)._replace(path=f"/{name}"))
    finally:
        with psycopg.connect(server_url, autocommit=True) as connection:
            connection.execute(sql.SQL("DROP DATABASE {} WITH (FORCE)").format(sql.Identifier(name)))


@contextmanager
def _service_role(service: RunningService, database_url: str) -> Iterator[str]:
    # A name of its own: roles belong to the whole server, which several runs may share.
    role = f"steelyard_test_{secrets.token_hex(6)}"
    service.manage("grant_service_role", role)
    try:
        yield role
    finally:
        with psycopg.connect(database_url, autocommit=True) as connection:
            connection.execute(sql.SQL("DROP OWNED BY {0}").format(sql.Identifier(role)))
            connection.execute(sql.SQL("DROP ROLE {0}").format(sql.Identifier(role)))


def _free_port() -> int:
    with socket.socket(socket.AF_INET, socket.SOCK_STREAM) as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])
