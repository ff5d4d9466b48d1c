"""Fields that accept one JSON type each and nothing that merely looks like it, and that bound what they accept."""

import re
from collections.abc import Callable, Mapping
from datetime import UTC, date, datetime
from decimal import Decimal
from typing import Any
from uuid import UUID

from django.utils.dateparse import parse_date, parse_datetime
from drf_spectacular.utils import extend_schema_field
from rest_framework import serializers

UNPRINTABLE = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f]")


class Text(serializers.CharField):
    """Text, blanks around it trimmed. Numbers and booleans are not text."""

    default_error_messages = {
        "invalid": "Text was expected here.",
        "unprintable": "The text holds control characters.",
        "max_length": "At most {max_length} characters.",
    }

    def __init__(self, most: int, **options: Any) -> None:
        options.setdefault("max_length", most)
        super().__init__(**options)

    def to_internal_value(self, data: Any) -> str:
        if not isinstance(data, str):
            self.fail("invalid")
        if UNPRINTABLE.search(data):
            self.fail("unprintable")
        return super().to_internal_value(data)


class Secret(serializers.CharField):
    """A password: every character counts, and it is never sent back."""

    def __init__(self, **options: Any) -> None:
        super().__init__(
            max_length=1000, trim_whitespace=False, write_only=True, style={"input_type": "password"}, **options
        )

    def to_internal_value(self, data: Any) -> str:
        if not isinstance(data, str):
            self.fail("invalid")
        return data


class YesNo(serializers.BooleanField):
    """JSON true or false."""

    default_error_messages = {"invalid": "Say true or false."}

    def to_internal_value(self, data: Any) -> bool:
        if not isinstance(data, bool):
            self.fail("invalid")
        return data


class OneOf(serializers.ChoiceField):
    """One of a closed list of words."""

    def to_internal_value(self, data: Any) -> str:
        if not isinstance(data, str) or data not in self.choices:
            allowed = ", ".join(str(choice) for choice in self.choices)
            raise serializers.ValidationError(f"It is one of {allowed}.", code="invalid_choice")
        return data


class Identifier(serializers.UUIDField):
    """An identifier in the form in which the service writes it."""

    default_error_messages = {"invalid": "That is not an identifier of this service."}

    def to_internal_value(self, data: Any) -> UUID:
        try:
            found = UUID(data) if isinstance(data, str) else None
        except ValueError:
            found = None
        if found is None or str(found) != data.lower():
            self.fail("invalid")
        return found


class Day(serializers.DateField):
    """A calendar day."""

    default_error_messages = {"invalid": "A day is written as in 2026-11-12."}

    def to_internal_value(self, data: Any) -> date:
        try:
            found = parse_date(data) if isinstance(data, str) and len(data) == 10 else None
        except ValueError:
            found = None
        if found is None:
            self.fail("invalid")
        return found


@extend_schema_field({"type": "string", "format": "date-time"})
class Instant(serializers.Field):
    """A time with its zone (RFC 3339); a time without one could mean two dozen different moments."""

    default_error_messages = {"invalid": "A time is written with its zone, as in 2026-11-12T09:31:07Z."}

    def to_internal_value(self, data: Any) -> datetime:
        try:
            found = parse_datetime(data) if isinstance(data, str) and len(data) <= 40 else None
        except ValueError:
            found = None
        # The first and last year cannot be moved to another zone.
        if found is None or found.tzinfo is None or not 1 < found.year < 9999:
            self.fail("invalid")
        return found.astimezone(UTC)

    def to_representation(self, value: datetime) -> str:
        return value.isoformat().replace("+00:00", "Z")


@extend_schema_field(
    {
        "anyOf": [
            {"type": "string", "pattern": r"^[0-9]{0,12}(\.[0-9]{1,12})?$", "minLength": 1},
            {"type": "number", "minimum": 0},
        ]
    }
)
class Size(serializers.DecimalField):
    """A size in an effect metric: text keeps its digits, a JSON number is taken as it is written."""

    def __init__(self, **options: Any) -> None:
        super().__init__(max_digits=24, decimal_places=12, coerce_to_string=True, **options)

    def to_internal_value(self, data: Any) -> Decimal:
        if isinstance(data, bool) or not isinstance(data, str | int | float):
            self.fail("invalid")
        return super().to_internal_value(data)


class DecimalText(serializers.CharField):
    """A decimal as text without the zeros that only the column's scale added."""

    def to_representation(self, value: Decimal) -> str:
        return format(value.normalize(), "f")


@extend_schema_field({"type": "object", "additionalProperties": True})
class JSONObject(serializers.Field):
    """An object whose content another layer checks, with pointers into it."""

    default_error_messages = {"not_a_dict": "An object was expected here."}

    def to_internal_value(self, data: Any) -> Mapping[str, Any]:
        if not isinstance(data, dict):
            self.fail("not_a_dict")
        return data

    def to_representation(self, value: Any) -> Any:
        return value


@extend_schema_field(
    {
        "type": "object",
        "maxProperties": 20,
        "propertyNames": {"pattern": "^[a-z][a-z0-9-]{0,39}$"},
        "additionalProperties": {"type": "string", "minLength": 1, "maxLength": 500},
    }
)
class Identifiers(serializers.Field):
    """Identifiers of a document by scheme: doi, isbn, handle, url …"""

    default_error_messages = {
        "not_a_dict": "An object of scheme and value was expected here.",
        "too_many": "At most 20 identifiers.",
        "scheme": "A scheme is a short name such as doi, made of a–z, 0–9 and hyphens.",
    }
    _scheme = re.compile(r"[a-z][a-z0-9-]{0,39}", re.ASCII)

    def to_internal_value(self, data: Any) -> dict[str, str]:
        if not isinstance(data, dict):
            self.fail("not_a_dict")
        if len(data) > 20:
            self.fail("too_many")
        wrong, found, value = {}, {}, Text(500)
        for scheme, text in data.items():
            try:
                if not self._scheme.fullmatch(scheme):
                    self.fail("scheme")
                found[scheme] = value.run_validation(text)
            except serializers.ValidationError as error:
                wrong[scheme] = error.detail
        if wrong:
            raise serializers.ValidationError(wrong)
        return found

    def to_representation(self, value: Any) -> Any:
        return value


class Computed(serializers.Field):
    """A value worked out from the whole object; ``schema`` describes it."""

    def __init__(self, compute: Callable[[Any], Any], schema: Mapping[str, Any], **options: Any) -> None:
        super().__init__(source="*", read_only=True, **options)
        self.compute = compute
        self._spectacular_annotation = {"field": dict(schema)}

    def to_representation(self, value: Any) -> Any:
        return self.compute(value)
