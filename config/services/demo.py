"""`make demo`: the whole service on this machine, on a database and a queue of its own, until Ctrl-C.

In order: refuse early what cannot work (already running, port taken, disk full); start the embedded database;
bring its tables up to date; load the invented scenario once; start web server, worker and scheduler; print one
address and one sign-in; wait; stop everything in the opposite order. Servers that happen to run on the machine are
never used: variables that name some are left out of the children's environment.
"""

from __future__ import annotations

import os
import signal
import sys
import time
import urllib.error
import urllib.request
from contextlib import ExitStack
from pathlib import Path
from threading import Event
from types import FrameType

from config import environment
from config.services import commands
from config.services.errors import StartRefused, disk_full, refuse_when_disk_is_full, require_free_space
from config.services.installation import (
    RunLock,
    SignIn,
    ensure_secret_key,
    ensure_sign_in,
    prepare_folder,
    require_free_port,
    write_private,
)
from config.services.postgresql import EmbeddedPostgreSQL
from config.services.processes import Child, Watchdog, start

ADDRESS = "127.0.0.1"
FREE_MEGABYTES = 400
READY_SECONDS = 90
# What web server and worker act as, so that not even a fault of theirs could rewrite history.
SERVICE_ROLE = "steelyard_service"
# A process that keeps ending is not started for ever.
RESTARTS_ALLOWED = 3
RESTART_WINDOW_SECONDS = 60

_NOT_FOR_CHILDREN = frozenset(
    {
        *("DATABASE_URL", "CELERY_BROKER_URL", "SECRET_KEY", "DJANGO_SETTINGS_MODULE"),
        *("STEELYARD_DATABASE_ROLE", "STEELYARD_HASHED_STATIC", "STEELYARD_DEBUG"),
    }
)


class StopAsked(Exception):
    """The person, the terminal or the system asked the demo to end."""


class Demo:
    """One run of the demo on one data folder."""

    def __init__(self, folder: Path, port: int) -> None:
        self.folder = folder
        self.port = port
        self.url = f"http://{ADDRESS}:{port}/"
        self._stop = Event()
        self._children: list[Child] = []
        self._restarts: dict[str, list[float]] = {}

    def run(self) -> None:
        """Start, serve until asked to stop, stop. Raises StartRefused with one sentence."""
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
            signal.signal(number, self._on_signal)
        try:
            prepare_folder(self.folder)
            require_free_space(self.folder, megabytes=FREE_MEGABYTES)
            with ExitStack() as stack:
                lock = stack.enter_context(RunLock(self.folder))
                require_free_port(self.port)
                self.watchdog = stack.enter_context(Watchdog(keep_open=lock.descriptor))
                stack.callback(self._stop_children)
                self._start(stack)
                self._supervise()
        except StopAsked:
            say("Stopped. The data are kept; `make demo` goes on from here.")
        except OSError as error:
            refuse_when_disk_is_full(error, self.folder)
            raise

    def _start(self, stack: ExitStack) -> None:
        ensure_secret_key(self.folder)
        sign_in = ensure_sign_in(self.folder)
        say("Starting the database ...")
        database = EmbeddedPostgreSQL(self.folder / "postgresql")
        self._keep(database.start())
        database.ensure_database()
        write_private(self.folder / "database-url", database.url())
        say("Bringing its tables up to date ...")
        self._step("migrate", "migrate", "--no-input", verbosity=1)
        self._step("privileges", "grant_service_role", SERVICE_ROLE, verbosity=1)
        self._step("static", "collectstatic", "--no-input", verbosity=0)
        say("Loading the invented scenario (once) ...")
        self._step("load-demo", "load_demo", verbosity=1, sign_in=sign_in)
        say("Starting web server, worker and scheduler ...")
        for name in ("worker", "scheduler", "web"):
            self._start_service(name)
        self._wait_until_ready()
        say("")
        say(f"  Steelyard is running at  {self.url}")
        say(f"  Sign in as               {sign_in.email}")
        say(f"  with the password        {sign_in.password}")
        say("")
        say("  Everything in it is invented. Ctrl-C stops it; the data are kept.")
        say("")

    def _environment(self, sign_in: SignIn | None = None) -> dict[str, str]:
        inherited = {
            name: value
            for name, value in os.environ.items()
            if name not in _NOT_FOR_CHILDREN and not name.startswith("PG")
        }
        ours = {
            "STEELYARD_DATA": str(self.folder),
            "STEELYARD_HTTPS": "0",
            "STEELYARD_HOSTS": f"{ADDRESS},localhost",
            "STEELYARD_STATIC_ROOT": str(self.folder / "static"),
        }
        if sign_in is not None:
            # Not as arguments: those can be read by everyone on the machine.
            ours |= {"STEELYARD_DEMO_EMAIL": sign_in.email, "STEELYARD_DEMO_PASSWORD": sign_in.password}
        return commands.process_environment(inherited | ours)

    def _log_path(self, name: str) -> Path:
        return self.folder / "logs" / f"{name}.log"

    def _step(self, name: str, *arguments: str, verbosity: int, sign_in: SignIn | None = None) -> None:
        """Run a management command to its end, unless asked to stop meanwhile."""
        path = self._log_path(name)
        command = commands.manage(*arguments, "--verbosity", str(verbosity))
        with path.open("wb") as log:
            child = start(name, command, environment=self._environment(sign_in), log=log)
        self._keep(child)
        while child.is_running():
            if self._stop.wait(0.05):
                raise StopAsked
        self._forget(child)
        if child.process.returncode != 0:
            raise self._refusal(name, path)

    def _start_service(self, name: str) -> None:
        match name:
            case "web":
                command = commands.web(address=f"{ADDRESS}:{self.port}", processes=2)
                grace_seconds = commands.WEB_STOP_SECONDS
            case "worker":
                command = commands.worker(processes=2)
                grace_seconds = commands.WORKER_STOP_SECONDS
            case "scheduler":
                command = commands.scheduler()
                grace_seconds = 10.0
            case _:
                raise ValueError(f"There is no service called {name}.")
        with self._log_path(name).open("ab") as log:
            log.truncate(0)
            surroundings = self._environment() | {"STEELYARD_DATABASE_ROLE": SERVICE_ROLE}
            self._keep(start(name, command, environment=surroundings, log=log, grace_seconds=grace_seconds))

    def _wait_until_ready(self) -> None:
        deadline = time.monotonic() + READY_SECONDS
        while not self._answers():
            if self._stop.wait(0.1):
                raise StopAsked
            for child in self._children:
                if not child.is_running():
                    raise self._refusal(child.name, self._log_path(child.name))
            if time.monotonic() > deadline:
                raise self._refusal("web", self._log_path("web"))

    def _answers(self) -> bool:
        # Without the proxies of the environment: this is our own machine.
        opener = urllib.request.build_opener(urllib.request.ProxyHandler({}))
        try:
            with opener.open(f"{self.url}health/ready", timeout=5) as answer:
                return bool(answer.status == 200)
        except (urllib.error.URLError, OSError):
            return False

    def _supervise(self) -> None:
        while not self._stop.wait(0.5):
            for child in [child for child in self._children if not child.is_running()]:
                if child.name == "database":
                    raise self._refusal("database", self._log_path("database"))
                self._restart(child)
        raise StopAsked

    def _restart(self, child: Child) -> None:
        now = time.monotonic()
        recent = [at for at in self._restarts.get(child.name, []) if now - at < RESTART_WINDOW_SECONDS]
        if len(recent) >= RESTARTS_ALLOWED:
            raise self._refusal(child.name, self._log_path(child.name))
        self._restarts[child.name] = [*recent, now]
        say(f"The {child.name} ended unexpectedly and is started again (see {self._log_path(child.name)}).")
        child.stop()  # Members of its group may be left.
        self._forget(child)
        self._start_service(child.name)

    def _refusal(self, name: str, log: Path) -> StartRefused:
        words = log.read_text(encoding="utf-8", errors="replace") if log.exists() else ""
        if "No space left on device" in words:
            return disk_full(self.folder)
        lines = [line.strip() for line in words.splitlines() if line.strip()]
        reason = lines[-1] if lines else "no reason given"
        return StartRefused(f"The step '{name}' failed: {reason} (see {log}).")

    def _keep(self, child: Child) -> None:
        self._children.append(child)
        self.watchdog.guard(child)

    def _forget(self, child: Child) -> None:
        self._children.remove(child)
        self.watchdog.release(child)

    def _stop_children(self) -> None:
        """Ask everything that uses the database to stop, all at once; then the database."""
        users = [child for child in self._children if child.name != "database"]
        if users:
            say("Stopping ...")
        for child in users:
            child.ask_to_stop()
        for child in users:
            child.wait_or_kill()  # Not asked again: to some a second request means "at once".
            self._forget(child)
        for database in list(self._children):
            database.stop()
            self._forget(database)

    def _on_signal(self, number: int, frame: FrameType | None) -> None:
        if self._stop.is_set() and number == signal.SIGINT:
            # Asked twice by hand: no more patience with anything but the database.
            for child in self._children:
                child.grace_seconds = child.grace_seconds if child.name == "database" else 0.0
        self._stop.set()


def say(line: str) -> None:
    """Tell the person at the terminal, if there still is one."""
    try:
        print(line, flush=True)
    except OSError:
        # The terminal was closed; the stopping it asked for must go on.
        with open(os.devnull, "w", encoding="utf-8") as nowhere:
            os.dup2(nowhere.fileno(), sys.stdout.fileno())


def run() -> None:
    """Run the demo on the configured data folder and port."""
    Demo(environment.data_folder(), environment.whole_number("STEELYARD_PORT", default=8000, minimum=1)).run()
