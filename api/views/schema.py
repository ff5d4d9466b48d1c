"""The description of the service itself."""

from functools import cache
from typing import Any

from drf_spectacular.generators import SchemaGenerator
from drf_spectacular.renderers import (
    OpenApiJsonRenderer,
    OpenApiJsonRenderer2,
    OpenApiYamlRenderer,
    OpenApiYamlRenderer2,
)
from drf_spectacular.utils import extend_schema
from rest_framework.negotiation import DefaultContentNegotiation
from rest_framework.renderers import BaseRenderer
from rest_framework.request import Request
from rest_framework.response import Response

from api.permissions import Anyone
from evidence.errors import Invalid

from .base import ServiceView

FORMAT = "format"


class ByFormat(DefaultContentNegotiation):
    """What `format` asks for, else what Accept asks for."""

    def select_renderer(
        self, request: Request, renderers: list[BaseRenderer], format_suffix: str | None = None
    ) -> tuple[BaseRenderer, str]:
        wanted = request.query_params.get(FORMAT)
        if wanted is None:
            return super().select_renderer(request, renderers, format_suffix)
        found = next((renderer for renderer in renderers if renderer.format == wanted), None)
        if found is None:
            raise Invalid.field(f"/{FORMAT}", "unknown-choice", "format is json or yaml.")
        return found, found.media_type


class Schema(ServiceView):
    """OpenAPI 3.1, as JSON or YAML. It holds nothing of any evidence base, so strangers may read it."""

    authentication_classes = ()
    permission_classes = (Anyone,)
    parameters = frozenset({FORMAT})
    renderer_classes = (OpenApiJsonRenderer2, OpenApiJsonRenderer, OpenApiYamlRenderer, OpenApiYamlRenderer2)
    content_negotiation_class = ByFormat

    @extend_schema(exclude=True)
    def get(self, request: Request) -> Response:
        return Response(description())


@cache
def description() -> dict[str, Any]:
    """The OpenAPI document. It follows from the code alone, so a process builds it once."""
    return SchemaGenerator().get_schema(request=None, public=True)
