"""as_of on the wire: the parameter in, the headers out.

Every read of the register names the state it was taken from: ``Steelyard-Change`` (the change number) and
``Memento-Datetime`` (RFC 7089, the time of that change). An answer about a change named by its number never changes
again, so a client may keep it for ever; any other is checked with its ``ETag`` before it is used again.
"""

from datetime import UTC

from django.http import HttpResponse
from django.utils.cache import patch_vary_headers
from django.utils.http import http_date

from evidence.moments import Moment

A_YEAR = 365 * 24 * 60 * 60
AS_OF = "as_of"
FOR_EVER = f"private, max-age={A_YEAR}, immutable"
CHECK_FIRST = "private, no-cache"


def as_json(moment: Moment) -> dict[str, object]:
    """How a moment is written in a body; the empty register before change 1 has no time."""
    return {"change": moment.change, "time": moment.time}


def put_headers(response: HttpResponse, moment: Moment | None, *, is_final: bool) -> None:
    """Say which moment a response was taken from, and how long it may be kept."""
    if moment is not None:
        response["Steelyard-Change"] = str(moment.change)
        if moment.time is not None:
            response["Memento-Datetime"] = http_date(moment.time.astimezone(UTC).timestamp())
    if not response.has_header("Cache-Control"):
        response["Cache-Control"] = FOR_EVER if is_final else CHECK_FIRST
    patch_vary_headers(response, ["Accept", "Authorization", "Cookie"])
