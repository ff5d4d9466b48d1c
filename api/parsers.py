"""JSON within bounds. What a request may hold is settled here once, so that nothing behind it meets a surprise.

The body is read up to the cap of ``DATA_UPLOAD_MAX_MEMORY_SIZE``. Refused are: names given twice in an object (RFC
8259 leaves their meaning open), NaN and infinities, whole numbers that other programs could not keep (RFC 7493), NUL
and lone surrogates (PostgreSQL cannot store them), and nesting deeper than any of our resources.
"""

import json
import math
from collections.abc import Mapping
from typing import IO, Any

from django.conf import settings
from django.core.exceptions import RequestDataTooBig
from django.http import RawPostDataException, UnreadablePostError
from rest_framework.exceptions import ParseError
from rest_framework.parsers import BaseParser

DEEPEST = 32
LARGEST_WHOLE_NUMBER = 2**53 - 1
MOST_DISCARDED = 32 * 1024 * 1024
_LONGEST_NUMBER = 400
_PIECE = 64 * 1024


class MalformedJSON(ParseError):
    default_code = "malformed-json"


class OutOfBounds(ParseError):
    default_code = "json-out-of-bounds"


class BoundedJSONParser(BaseParser):
    media_type = "application/json"

    def parse(
        self, stream: IO[bytes], media_type: str | None = None, parser_context: Mapping[str, Any] | None = None
    ) -> Any:
        cap = settings.DATA_UPLOAD_MAX_MEMORY_SIZE
        try:
            body = stream.read(cap + 1)
        except UnreadablePostError as error:
            raise MalformedJSON("The body ended before it was complete.") from error
        if len(body) > cap:
            raise RequestDataTooBig(f"The body exceeds {cap} bytes.")
        return decode(body)


def discard(stream: IO[bytes]) -> None:
    """Read what is left of a body that nobody will look at, within reason, and forget it.

    A client that is still sending when the connection closes often never reads the answer, which says what was wrong.
    """
    left = MOST_DISCARDED
    try:
        while left > 0 and (piece := stream.read(_PIECE)):
            left -= len(piece)
    except (UnreadablePostError, RawPostDataException):
        # The client has gone, or the body has been read already: there is nothing left to discard.
        return


def decode(body: bytes) -> Any:
    """The value that a JSON text stands for, or ``MalformedJSON`` or ``OutOfBounds``."""
    try:
        data = json.loads(
            body.decode("utf-8-sig"),
            object_pairs_hook=_object,
            parse_int=_whole_number,
            parse_float=_number,
            parse_constant=_constant,
        )
    except UnicodeDecodeError as error:
        raise MalformedJSON("The body is not UTF-8.") from error
    except json.JSONDecodeError as error:
        raise MalformedJSON(f"{error.msg} at line {error.lineno}, column {error.colno}.") from error
    except RecursionError as error:
        raise OutOfBounds(f"The JSON is nested deeper than {DEEPEST} levels.") from error
    _check_depth_and_text(data)
    return data


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        seen: set[str] = set()
        twice = next(name for name, _ in pairs if name in seen or seen.add(name))  # type: ignore[func-returns-value]
        raise OutOfBounds(f"The name {twice[:60]!r} stands twice in one object.")
    return found


def _whole_number(text: str) -> int:
    if len(text) > _LONGEST_NUMBER or abs(number := int(text)) > LARGEST_WHOLE_NUMBER:
        raise OutOfBounds("A whole number lies beyond ±(2^53 − 1), which not every program can keep exactly.")
    return number


def _number(text: str) -> float:
    if len(text) > _LONGEST_NUMBER or not math.isfinite(number := float(text)):
        raise OutOfBounds("A number is too large or too long.")
    return number


def _constant(text: str) -> float:
    raise MalformedJSON(f"{text} is not JSON.")


def _check_depth_and_text(data: Any) -> None:
    # A list of what is left to look at, not recursion: the input decides how deep it goes.
    left = [(data, 1)]
    while left:
        value, depth = left.pop()
        if isinstance(value, str):
            _check_text(value)
        elif isinstance(value, dict | list):
            if depth > DEEPEST:
                raise OutOfBounds(f"The JSON is nested deeper than {DEEPEST} levels.")
            if isinstance(value, dict):
                for name in value:
                    _check_text(name)
            left += [(inner, depth + 1) for inner in (value.values() if isinstance(value, dict) else value)]


def _check_text(text: str) -> None:
    if "\0" in text:
        raise OutOfBounds("A text holds the NUL character, which cannot be kept.")
    try:
        text.encode()
    except UnicodeEncodeError as error:
        raise OutOfBounds("A text holds half of a surrogate pair.") from error
