"""The two bases of every shape, and how the framework's complaints become pointers, codes and sentences of ours."""

from collections.abc import Iterator, Mapping
from typing import Any

from rest_framework import serializers
from rest_framework.exceptions import ErrorDetail

from api.codes import all_codes
from evidence.errors import FieldProblem, Invalid

_OWN = "non_field_errors"

# Code of the framework → ours, with a sentence where ours says it better.
_CODES: dict[str, tuple[str, str]] = {
    "required": ("missing", "This field is needed."),
    "blank": ("missing", "This field cannot be empty."),
    "null": ("null-not-allowed", "This field cannot be null; leave it out instead."),
    "max_length": ("too-long", ""),
    "max_string_length": ("too-long", ""),
    "min_length": ("missing", ""),
    "empty": ("missing", "Name at least one."),
    "invalid_choice": ("unknown-choice", ""),
    "not_a_list": ("not-a-list", "A list was expected here."),
    "not_a_dict": ("not-an-object", "An object was expected here."),
    "null_characters_not_allowed": ("not-acceptable-text", ""),
    "surrogate_characters_not_allowed": ("not-acceptable-text", ""),
    "unprintable": ("not-acceptable-text", ""),
    "too_many": ("too-many", ""),
    "scheme": ("not-a-name", ""),
    "max_digits": ("not-a-number", ""),
    "max_decimal_places": ("not-a-number", ""),
    "max_whole_digits": ("not-a-number", ""),
}
# `invalid` says nothing by itself: what it means follows from the field.
_INVALID_BY_FIELD: dict[str, str] = {
    "Text": "not-text",
    "Secret": "not-text",
    "EmailField": "not-acceptable-value",
    "YesNo": "not-yes-or-no",
    "Identifier": "not-an-identifier",
    "Identifiers": "not-text",
    "Day": "not-a-date",
    "Instant": "not-a-time",
    "Size": "not-a-number",
}


class In(serializers.Serializer):
    """What a client sends. A field that is not known is refused, not ignored: it may be a misspelt one."""

    def to_internal_value(self, data: Any) -> dict[str, Any]:
        if not isinstance(data, Mapping):
            raise serializers.ValidationError({_OWN: [ErrorDetail("An object was expected here.", "not_a_dict")]})
        unknown = {
            name: [ErrorDetail(f"There is no field {name[:60]!r} here.", "unknown-field")]
            for name in data
            if name not in self.fields
        }
        try:
            accepted = super().to_internal_value(data)
        except serializers.ValidationError as error:
            raise serializers.ValidationError({**error.detail, **unknown}) from error
        if unknown:
            raise serializers.ValidationError(unknown)
        return accepted

    @classmethod
    def accept(cls, data: Any) -> dict[str, Any]:
        """The checked content of ``data``, or ``Invalid`` with every fault in it."""
        if not isinstance(data, dict):
            raise Invalid.field("", "body-not-an-object", "The body must be one JSON object.")
        shape = cls(data=data)
        if not shape.is_valid():
            raise Invalid(list(_faults(shape.errors, shape, "")))
        return shape.validated_data


class Out(serializers.Serializer):
    """What a client gets. Only the fields that are named leave."""


def _faults(detail: Any, field: Any, pointer: str) -> Iterator[FieldProblem]:
    if isinstance(detail, Mapping):
        for name, inner in detail.items():
            below = pointer if name == _OWN else f"{pointer}/{_escaped(str(name))}"
            yield from _faults(inner, _child(field, name), below)
    elif isinstance(detail, list):
        for each in detail:
            yield from _faults(each, field, pointer)
    else:
        yield _fault(detail, field, pointer)


def _fault(detail: ErrorDetail, field: Any, pointer: str) -> FieldProblem:
    if detail.code == "invalid":
        return FieldProblem(pointer, _INVALID_BY_FIELD.get(type(field).__name__, "not-acceptable-value"), str(detail))
    # A complaint of ours carries a code of ours already.
    own = detail.code if detail.code in all_codes() else "not-acceptable-value"
    code, sentence = _CODES.get(detail.code, (own, ""))
    return FieldProblem(pointer, code, sentence or str(detail))


def _child(field: Any, name: Any) -> Any:
    """The field that a key of an error belongs to: a named field, or the member of a list."""
    if isinstance(field, serializers.ListSerializer | serializers.ListField):
        return field.child
    if isinstance(field, serializers.Serializer):
        return field.fields.get(name, field)
    return field


def _escaped(name: str) -> str:
    return name.replace("~", "~0").replace("/", "~1")
