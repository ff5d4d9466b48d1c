"""How the inner loops are compiled, and where the compiled code is kept.

`kernel` is the one decorator for a compiled function. Compiled code is stored on disk, so that only the first process
ever waits for the compiler; `python -m analysis.methods.warm` does that waiting ahead of time.

Where the code is kept, first that applies:

1. `$NUMBA_CACHE_DIR`, if set (a container image sets it to a directory its user may write);
2. `__pycache__` beside this file, if it may be written;
3. `$XDG_CACHE_HOME/steelyard` or `~/.cache/steelyard`, if it may be written;
4. a fresh temporary directory: everything works, but each process compiles for itself.

Inside it the files stand in a folder named by a digest of this package's source. The compiler's own freshness check
looks at one source file at a time, while a compiled function has the functions it calls built in: after an edit in
one file it would happily run an old copy of it inside a function of another file.
"""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, cast

import numba


def _source_digest(package: Path) -> str:
    digest = hashlib.sha256()
    for path in sorted(package.glob("*.py")):
        digest.update(path.name.encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _may_write(directory: Path) -> bool:
    try:
        directory.mkdir(parents=True, exist_ok=True)
    except OSError:
        return False
    return os.access(directory, os.W_OK | os.X_OK)


def _cache_root(package: Path) -> Path:
    chosen = os.environ.get("NUMBA_CACHE_DIR")
    if chosen:
        return Path(chosen)
    user_cache = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "steelyard"
    for candidate in (package / "__pycache__", user_cache):
        if _may_write(candidate):
            return candidate
    # mkdtemp makes a directory only this user can enter: compiled code must not be plantable by another user.
    return Path(tempfile.mkdtemp(prefix="steelyard-kernels-"))


_PACKAGE = Path(__file__).resolve().parent
cache_directory: Path = _cache_root(_PACKAGE) / f"kernels-{_source_digest(_PACKAGE)}"
numba.config.CACHE_DIR = str(cache_directory)  # type: ignore[attr-defined,unused-ignore]


OPTIONS: Any = {"error_model": "numpy", "fastmath": {"contract"}}


def kernel[F: Callable[..., Any]](function: F) -> F:
    """Compile `function` on first use and keep the result on disk.

    `error_model="numpy"` keeps division by zero from raising inside a loop (the callers decide such cases before the
    loop). Of fast-math only `contract` is on: a multiplication and an addition may become one fused, more exact
    operation. Reordering sums or assuming there are no infinities stays off, the edge cases need those.
    """
    return cast(F, numba.njit(cache=True, nogil=True, **OPTIONS)(function))
