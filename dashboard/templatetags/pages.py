"""What templates need beyond Django's own: links that keep the moment, dates in words, tables."""

from datetime import UTC, date, datetime
from typing import Any
from urllib.parse import urlencode

from django import template
from django.template.context import Context
from django.urls import reverse

from dashboard.figures.numbers import write_count, write_date
from dashboard.figures.tables import Table

register = template.Library()


@register.simple_tag(takes_context=True)
def place(context: Context, name: str, *args: object, **query: object) -> str:
    """The address of a page of the evidence base being visited, at the moment being visited.

    Further keyword arguments go into the query; `as_of` there wins over the visit's own, and "" drops it.
    """
    visit = context["visit"]
    asked: dict[str, Any] = {"as_of": visit.as_of, **query}
    address = reverse(f"dashboard:{name}", args=[visit.base.slug, *args])
    kept = {key: value for key, value in asked.items() if value not in ("", None)}
    return f"{address}?{urlencode(kept)}" if kept else address


@register.filter
def day(value: date | datetime | None) -> str:
    """A date in words: 12 November 2026. Instants are taken in UTC, as the register keeps them."""
    if value is None:
        return ""
    return write_date(value.astimezone(UTC).date() if isinstance(value, datetime) else value)


@register.filter
def instant(value: datetime | None) -> str:
    """A date and time in words, in UTC: 12 November 2026, 09:31 UTC."""
    if value is None:
        return ""
    at = value.astimezone(UTC)
    return f"{write_date(at.date())}, {at:%H:%M} UTC"


@register.filter
def counted(number: int, noun: str) -> str:
    """A number with its noun, and the noun's plural after a comma where it is not formed with s."""
    singular, _, plural = noun.partition(",")
    return write_count(number, singular, plural or None)


@register.inclusion_tag("dashboard/parts/table.html")
def data_table(table: Table) -> dict[str, Table]:
    return {"table": table}
