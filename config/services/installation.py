"""What a local installation generates once and keeps in its data folder, readable by its owner alone.

secret-key      signs sessions
sign-in         e-mail address and password of the demo's one person
database-url    how to reach the embedded database while it runs
lock            held while the demo runs; names its process
"""

from __future__ import annotations

import fcntl
import os
import secrets
import socket
import time
from contextlib import AbstractContextManager
from dataclasses import dataclass
from pathlib import Path

import psutil

from config.services.errors import StartRefused

# Without letters and digits that look alike.
_UNMISTAKABLE = "abcdefghjkmnpqrstuvwxyz23456789"
DEMO_EMAIL = "demo@steelyard.example"


def prepare_folder(folder: Path) -> None:
    """Make the data folder; its files are private, but the embedded database's account may pass through it."""
    folder.mkdir(parents=True, exist_ok=True)
    folder.chmod(0o711)
    for name in ("logs", "queue", "static"):
        (folder / name).mkdir(mode=0o700, exist_ok=True)


def write_private(path: Path, text: str) -> None:
    """Replace a file's contents; nobody but its owner can ever read it."""
    unfinished = path.with_name(f".{path.name}.unfinished")
    descriptor = os.open(unfinished, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
    with open(descriptor, "w", encoding="utf-8") as file:
        file.write(text + "\n")
    unfinished.replace(path)


def ensure_secret_key(folder: Path) -> None:
    """Generate the signing key on the first start."""
    path = folder / "secret-key"
    if not path.exists():
        write_private(path, secrets.token_urlsafe(64))


@dataclass(frozen=True)
class SignIn:
    """The demo person's e-mail address and password."""

    email: str
    password: str


def ensure_sign_in(folder: Path) -> SignIn:
    """The demo's sign-in, generated on the first start."""
    path = folder / "sign-in"
    if not path.exists():
        groups = ("".join(secrets.choice(_UNMISTAKABLE) for _ in range(4)) for _ in range(4))
        write_private(path, f"{DEMO_EMAIL}\n{'-'.join(groups)}")
    email, password = path.read_text(encoding="utf-8").split()
    return SignIn(email=email, password=password)


class RunLock(AbstractContextManager["RunLock"]):
    """Held by whoever runs on a data folder, and by its watchdog until everything is stopped.

    The kernel lets go of it when both are gone, so a crash never leaves it behind.
    """

    def __init__(self, folder: Path, *, wait_seconds: float = 90.0) -> None:
        self.path = folder / "lock"
        self.wait_seconds = wait_seconds
        self.descriptor = -1

    def __enter__(self) -> RunLock:
        self.descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o600)
        deadline = time.monotonic() + self.wait_seconds
        told = False
        while not self._taken():
            holder = self._holder()
            if holder is not None:
                os.close(self.descriptor)
                raise StartRefused(
                    f"The service is already running on {self.path.parent} (process {holder}): use that one, or"
                    " stop it with Ctrl-C first."
                )
            if time.monotonic() > deadline:
                os.close(self.descriptor)
                raise StartRefused(
                    f"Processes of an earlier run on {self.path.parent} are still stopping: try again in a minute."
                )
            if not told:
                print("Waiting for an earlier run to finish stopping ...", flush=True)
                told = True
            time.sleep(0.2)
        os.truncate(self.descriptor, 0)
        os.pwrite(self.descriptor, f"{os.getpid()} {_started(os.getpid())}\n".encode(), 0)
        return self

    def __exit__(self, *_: object) -> None:
        os.close(self.descriptor)

    def _taken(self) -> bool:
        try:
            fcntl.flock(self.descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            return False
        return True

    def _holder(self) -> int | None:
        """The runner that holds the lock, if it is alive: after a crash only its watchdog still does."""
        words = os.pread(self.descriptor, 100, 0).decode().split()
        # Empty for the moment between taking the lock and writing the number.
        if len(words) != 2:
            return None
        number = int(words[0])
        # The number alone could by now be another process's.
        return number if _started(number) == words[1] else None


def _started(number: int) -> str:
    try:
        return f"{psutil.Process(number).create_time():.2f}"
    except psutil.NoSuchProcess:
        return ""


def require_free_port(port: int, address: str = "127.0.0.1") -> None:
    """Refuse to start where another server listens already."""
    with socket.socket(socket.AF_INET, socket.SOCK_STREAM) as probe:
        # As the web server does it: connections of an earlier run that linger in the kernel are no obstacle.
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind((address, port))
        except PermissionError as error:
            raise StartRefused(
                f"Port {port} may not be used by this account: choose one above 1023, for instance"
                " STEELYARD_PORT=8001 make demo."
            ) from error
        except OSError as error:
            raise StartRefused(
                f"Port {port} is already in use on this machine: stop what is using it, or choose another port, for"
                f" instance STEELYARD_PORT={port + 1} make demo."
            ) from error
