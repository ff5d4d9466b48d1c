"""Pages of a list: a cursor over one unique column, so that equal values of anything else cannot lose a row.

The first page settles the moment; its ``next`` link carries that moment, so a walk over all pages sees one state of the
register however much arrives meanwhile. Links stand in the body and in the ``Link`` header (RFC 8288).
"""

import base64
import binascii
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Any
from uuid import UUID

from django.db.models import QuerySet
from rest_framework.request import Request

from api.moments import AS_OF
from evidence.errors import Invalid
from evidence.moments import Moment

CURSOR, LIMIT = "cursor", "limit"
DEFAULT_LIMIT, LARGEST_LIMIT = 50, 500
_LONGEST_CURSOR = 200


def whole_number(text: str) -> int:
    """A cursor's number within the range of a bigint column."""
    number = int(text)
    if not 0 <= number < 2**63 or str(number) != text:
        raise ValueError(text)
    return number


def slug(text: str) -> str:
    if not text.isascii() or not text.isprintable():
        raise ValueError(text)
    return text


@dataclass(frozen=True)
class Order:
    """The unique column a list is ordered by, and how a cursor's text becomes a value of it."""

    column: str
    read: Callable[[str], Any]
    descending: bool = False

    def value_of(self, row: Any) -> Any:
        for name in self.column.split("__"):
            row = getattr(row, name)
        return row

    def after(self, rows: QuerySet[Any], value: Any) -> QuerySet[Any]:
        return rows.filter(**{f"{self.column}__{'lt' if self.descending else 'gt'}": value})


BY_ID = Order("id", UUID)


@dataclass(frozen=True)
class Page[Row]:
    rows: list[Row]
    next: str | None

    @property
    def links(self) -> str | None:
        return f'<{self.next}>; rel="next"' if self.next is not None else None


def page_of[Row](request: Request, rows: QuerySet[Row], order: Order, moment: Moment | None) -> Page[Row]:
    """The page of ``rows`` that the request's ``cursor`` and ``limit`` ask for."""
    limit = _limit(request.query_params.get(LIMIT))
    rows = rows.order_by(f"{'-' if order.descending else ''}{order.column}")
    if (cursor := request.query_params.get(CURSOR)) is not None:
        rows = order.after(rows, _value(cursor, order))
    # One row more than asked for tells whether there is another page, without counting the list.
    found = list(rows[: limit + 1])
    if len(found) <= limit:
        return Page(found, None)
    found = found[:limit]
    return Page(found, _next(request, order.value_of(found[-1]), moment))


def page_of_rows[Row](request: Request, rows: Sequence[Row], moment: Moment) -> Page[Row]:
    """The same over a sequence that never changes at a moment; its cursor is a place in it."""
    limit = _limit(request.query_params.get(LIMIT))
    cursor = request.query_params.get(CURSOR)
    start = _value(cursor, Order("", whole_number)) if cursor is not None else 0
    found = list(rows[start : start + limit])
    if start + limit >= len(rows):
        return Page(found, None)
    return Page(found, _next(request, start + limit, moment))


def _limit(text: str | None) -> int:
    if text is None:
        return DEFAULT_LIMIT
    if text.isascii() and text.isdigit() and len(text) <= 3 and 1 <= int(text) <= LARGEST_LIMIT:
        return int(text)
    raise Invalid.field(f"/{LIMIT}", "not-a-limit", f"limit is a whole number from 1 to {LARGEST_LIMIT}.")


def _value(cursor: str, order: Order) -> Any:
    try:
        if len(cursor) > _LONGEST_CURSOR:
            raise ValueError(cursor)
        text = base64.b64decode(cursor.encode("ascii") + b"==", altchars=b"-_", validate=False).decode("ascii")
        return order.read(text)
    except (binascii.Error, ValueError) as error:
        raise Invalid.field(
            f"/{CURSOR}", "not-a-cursor", "The cursor is not one of this list: follow the next link as it stands."
        ) from error


def _next(request: Request, last: Any, moment: Moment | None) -> str:
    parameters = request.query_params.copy()
    parameters[CURSOR] = base64.urlsafe_b64encode(str(last).encode()).decode().rstrip("=")
    if moment is not None:
        parameters[AS_OF] = str(moment.change)
    return request.build_absolute_uri(f"{request.path}?{parameters.urlencode(safe=':')}")


def listed(page: Page[Any], render: Callable[[Iterable[Any]], list[Any]]) -> dict[str, Any]:
    """The body of a list."""
    return {"results": render(page.rows), "next": page.next}
