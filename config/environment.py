"""The one place that reads the process environment.

`config.settings` and the service runner ask these functions and nothing else does, so the list of variables
is the list of calls in those two. A value that makes no sense stops the start with a sentence naming it.
"""

from __future__ import annotations

import os
from pathlib import Path

from django.core.exceptions import ImproperlyConfigured

PROJECT_FOLDER = Path(__file__).resolve().parent.parent

_TRUE = frozenset({"1", "true", "yes", "on"})
_FALSE = frozenset({"0", "false", "no", "off"})


def text(name: str, default: str = "") -> str:
    """The variable's text without surrounding blanks; unset and empty both give the default."""
    return os.environ.get(name, "").strip() or default


def flag(name: str, *, default: bool) -> bool:
    """A yes-or-no variable: 1/true/yes/on or 0/false/no/off."""
    value = text(name).lower()
    if not value:
        return default
    if value in _TRUE:
        return True
    if value in _FALSE:
        return False
    raise ImproperlyConfigured(f"{name} must be 1 or 0, not {value!r}.")


def whole_number(name: str, *, default: int, minimum: int = 0) -> int:
    """A whole number not below the minimum."""
    value = text(name)
    if not value:
        return default
    try:
        number = int(value)
    except ValueError as error:
        raise ImproperlyConfigured(f"{name} must be a whole number, not {value!r}.") from error
    if number < minimum:
        raise ImproperlyConfigured(f"{name} must be at least {minimum}, not {number}.")
    return number


def words(name: str, *, default: str = "") -> list[str]:
    """A comma-separated list, blanks and empty entries dropped."""
    return [word.strip() for word in text(name, default).split(",") if word.strip()]


def data_folder() -> Path:
    """Where this installation keeps what it generates: keys, the embedded database, the file-backed queue."""
    return Path(text("STEELYARD_DATA", str(PROJECT_FOLDER / "var"))).expanduser().resolve()


def text_or_file(name: str, path: Path, *, remedy: str) -> str:
    """The variable, or what the service runner wrote to a file, or a start refused with the remedy."""
    value = text(name)
    if value:
        return value
    try:
        value = path.read_text(encoding="utf-8").strip()
    except FileNotFoundError:
        value = ""
    if not value:
        raise ImproperlyConfigured(f"{name} is not set and {path} does not exist: {remedy}")
    return value
