"""Small shapes that many resources share."""

from collections.abc import Callable, Mapping
from typing import Any

from django.urls import reverse
from rest_framework import serializers

from api.moments import as_json
from evidence.models.revisions import Revision
from evidence.moments import Moment

from .fields import Computed, Instant, Text
from .shapes import Out

MOST_REASON = 4_000


def reason_field(**options: Any) -> Text:
    """Why something is done, in words."""
    return Text(MOST_REASON, help_text="Why, in words a reader will understand in ten years.", **options)


def path_to(name: str, base: str, **kwargs: Any) -> str:
    """The address of a resource of an evidence base, without the host."""
    return reverse(f"api:{name}", kwargs={"base": base, **kwargs})


class MomentOut(Out):
    """A state of the register: a change number and the time of that change."""

    change = serializers.IntegerField()
    time = Instant(allow_null=True)


class RungOut(Out):
    """Work that a change asked for; follow it under ``requests/{id}/``."""

    id = serializers.IntegerField()
    question = serializers.CharField()


class WrittenOut(Out):
    """What every change of the register answers besides the thing itself."""

    change = serializers.IntegerField(help_text="The number of this change: as_of it, the register looks like this.")
    requests = RungOut(many=True)


class PersonRef(Out):
    """A person as others see them."""

    id = serializers.UUIDField()
    name = serializers.CharField()


class ShapeOf(serializers.Field):
    """A nested shape of something worked out from the whole object."""

    def __init__(self, shape: type[Out], compute: Callable[[Any], Any], **options: Any) -> None:
        super().__init__(source="*", read_only=True, **options)
        self.shape, self.compute = shape, compute
        self._spectacular_annotation = {"field": shape}

    def to_representation(self, value: Any) -> Any:
        found = self.compute(value)
        return None if found is None else self.shape(found, context=self.context).data


def since() -> ShapeOf:
    """The change with which a revision began to hold."""
    return ShapeOf(MomentOut, _since)


def _since(revision: Revision) -> dict[str, Any]:
    return as_json(Moment(revision.from_change, revision.recorded_from))


class Links(Computed):
    """Addresses of what belongs to a thing: name in ``links`` → route and how its arguments come from the thing."""

    def __init__(self, /, **targets: tuple[str, Callable[[Any], Mapping[str, Any]]]) -> None:
        self.targets = targets
        properties = {name: {"type": "string", "format": "uri-reference"} for name in targets}
        schema = {"type": "object", "properties": properties, "required": list(targets)}
        super().__init__(lambda value: None, schema)

    def to_representation(self, value: Any) -> dict[str, str]:
        base = self.context["base"]
        return {name: path_to(route, base, **arguments(value)) for name, (route, arguments) in self.targets.items()}
