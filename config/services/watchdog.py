"""Ends the process groups of a runner that died without stopping them (see `processes`).

Reads lines `guard GROUP SIGNAL GRACE_SECONDS` and `release GROUP` until its input closes, which happens when
the runner exits for whatever reason; then signals every group still guarded, and after the grace kills it.
Runs as a plain script: it must start fast and depend on nothing.
"""

from __future__ import annotations

import os
import signal
import sys
import time


def _signal_group(group: int, number: int) -> bool:
    try:
        os.killpg(group, number)
    except (ProcessLookupError, PermissionError):
        return False
    return True


def main() -> None:
    """Follow the runner until it is gone, then end what it left."""
    # The terminal's signals are for the runner; ours is the closing of the pipe.
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)
    guarded: dict[int, tuple[int, float]] = {}
    for line in sys.stdin:
        match line.split():
            case ["guard", group, number, grace]:
                guarded[int(group)] = (int(number), float(grace))
            case ["release", group]:
                guarded.pop(int(group), None)
    # Last started first: the database goes when nothing uses it any more.
    for group, (number, grace) in reversed(guarded.items()):
        _signal_group(group, number)
        deadline = time.monotonic() + grace
        while time.monotonic() < deadline and _signal_group(group, 0):
            time.sleep(0.05)
        _signal_group(group, signal.SIGKILL)


if __name__ == "__main__":
    main()
