"""Child processes that cannot outlive the runner.

Each child leads its own process group. Three things end it, so that at least one always works:

1. the runner stops it, politely and then by force, group and all;
2. on Linux the kernel signals the child the moment the runner dies, however it dies;
3. a watchdog process holds one end of a pipe whose other end only the runner holds; when the runner is gone
   the pipe closes, and the watchdog ends every group that was registered through it. This also reaches
   grandchildren (web and task workers) and works where the kernel has no such signal.
"""

from __future__ import annotations

import ctypes
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO

_SET_PARENT_DEATH_SIGNAL = 1  # PR_SET_PDEATHSIG, prctl(2)


def _die_with_parent(death_signal: signal.Signals) -> Callable[[], None] | None:
    """What a new child runs before it becomes the program: ask for a signal when the parent dies."""
    if sys.platform != "linux":
        return None
    # Loaded here, in the parent: a forked child of a threaded program must not load libraries.
    prctl = ctypes.CDLL(None, use_errno=True).prctl
    parent = os.getpid()

    def ask() -> None:
        prctl(_SET_PARENT_DEATH_SIGNAL, int(death_signal), 0, 0, 0)
        if os.getppid() != parent:  # The parent died before the request was made.
            os.kill(os.getpid(), death_signal)

    return ask


@dataclass
class Child:
    """A started process and the way it likes to be stopped."""

    name: str
    process: subprocess.Popen[bytes]
    stop_signal: signal.Signals = signal.SIGTERM
    grace_seconds: float = 25.0

    def is_running(self) -> bool:
        """Whether the process itself is still there."""
        return self.process.poll() is None

    def ask_to_stop(self) -> None:
        """Send the stop signal to the process, which tells its own children."""
        if self.is_running():
            self.process.send_signal(self.stop_signal)

    def wait_or_kill(self) -> None:
        """Wait for the grace period, then end whatever is left of the group."""
        try:
            self.process.wait(self.grace_seconds)
        except subprocess.TimeoutExpired:
            signal_group(self.process.pid, signal.SIGKILL)
            self.process.wait()
        # The leader is gone; a member that ignored it is not asked again.
        signal_group(self.process.pid, signal.SIGKILL)

    def stop(self) -> None:
        """Stop the process and its group."""
        self.ask_to_stop()
        self.wait_or_kill()

    def kill(self) -> None:
        """End the whole group at once, as a crash would."""
        signal_group(self.process.pid, signal.SIGKILL)
        self.process.wait()


def signal_group(group: int, number: signal.Signals) -> bool:
    """Signal every process of a group; False when none is left."""
    try:
        os.killpg(group, number)
    except (ProcessLookupError, PermissionError):
        return False
    return True


def start(
    name: str,
    command: Sequence[str | Path],
    *,
    environment: Mapping[str, str],
    log: IO[bytes] | int | None,
    folder: Path | None = None,
    account: tuple[int, int] | None = None,
    stop_signal: signal.Signals = signal.SIGTERM,
    grace_seconds: float = 25.0,
) -> Child:
    """Start a program in its own session, writing to the log, stopped by the kernel should we die first.

    `account` is a user and group number to run as; only root may give one.
    """
    user, group = account if account else (None, None)
    process = subprocess.Popen(
        [str(part) for part in command],
        env=dict(environment),
        stdin=subprocess.DEVNULL,
        stdout=log,
        stderr=subprocess.STDOUT if log is not None else None,
        cwd=folder,
        user=user,
        group=group,
        extra_groups=[] if account else None,
        start_new_session=True,
        preexec_fn=_die_with_parent(stop_signal),
    )
    return Child(name=name, process=process, stop_signal=stop_signal, grace_seconds=grace_seconds)


@dataclass
class Watchdog:
    """The process that ends registered groups when this one is gone. Use as a context manager.

    `keep_open` is a descriptor that it holds until then, so that a lock on it outlasts a crash of ours.
    """

    keep_open: int | None = None
    _process: subprocess.Popen[bytes] | None = field(default=None, init=False)

    def __enter__(self) -> Watchdog:
        self._process = subprocess.Popen(
            [sys.executable, str(Path(__file__).with_name("watchdog.py"))],
            stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            pass_fds=[] if self.keep_open is None else [self.keep_open],
            start_new_session=True,
        )
        return self

    def guard(self, child: Child) -> None:
        """Have the watchdog end this child's group when we die."""
        self._tell(f"guard {child.process.pid} {int(child.stop_signal)} {child.grace_seconds:g}")

    def release(self, child: Child) -> None:
        """Forget a child that has been stopped: its number may be given to somebody else's process."""
        self._tell(f"release {child.process.pid}")

    def _tell(self, line: str) -> None:
        if self._process is None or self._process.stdin is None:
            raise RuntimeError("The watchdog has not been started.")
        self._process.stdin.write(f"{line}\n".encode())
        self._process.stdin.flush()

    def __exit__(self, *_: object) -> None:
        if self._process is not None and self._process.stdin is not None:
            self._process.stdin.close()
            self._process.wait()


def wait_until(condition: Callable[[], bool], *, seconds: float, pause_seconds: float = 0.05) -> bool:
    """Ask again and again until the condition holds or the time is over; tells which."""
    deadline = time.monotonic() + seconds
    while not condition():
        if time.monotonic() > deadline:
            return False
        time.sleep(pause_seconds)
    return True
