"""Why a start was refused, as one sentence for the person at the terminal."""

from __future__ import annotations

import errno
import shutil
from pathlib import Path


class StartRefused(Exception):
    """The start cannot go on; the message is one sentence saying why and what to do."""


def disk_full(folder: Path) -> StartRefused:
    """The sentence for a disk with no room left."""
    return StartRefused(f"The disk holding {folder} is full: free some space there, or set STEELYARD_DATA elsewhere.")


def require_free_space(folder: Path, *, megabytes: int) -> None:
    """Refuse to start where the database could not even write its first journal files."""
    free_megabytes = shutil.disk_usage(folder).free // 1_000_000
    if free_megabytes < megabytes:
        raise StartRefused(
            f"Only {free_megabytes} MB are free on the disk holding {folder}, and {megabytes} MB are needed:"
            " free some space, or set STEELYARD_DATA to a folder on another disk."
        )


def refuse_when_disk_is_full(error: OSError, folder: Path) -> None:
    """Turn "no space left" and "quota exceeded" into the sentence; leave every other error to its caller."""
    if error.errno in {errno.ENOSPC, errno.EDQUOT}:
        raise disk_full(folder) from error
