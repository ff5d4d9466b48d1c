"""The OpenAPI 3.1 description: written beside each method with ``operation``, completed by the hook ``complete``.

What the framework cannot know is added here once: the error answers that follow from what an operation is (does it take
a body, does it lie in an evidence base), the headers of as_of, and that unknown fields are refused.
"""

from collections.abc import Callable, Iterable, Mapping
from http import HTTPStatus
from inspect import getdoc
from typing import Any

from drf_spectacular.types import OpenApiTypes
from drf_spectacular.utils import OpenApiExample, OpenApiParameter, extend_schema
from rest_framework import serializers

from api.codes import all_codes, title_of
from api.moments import AS_OF
from api.pagination import CURSOR, DEFAULT_LIMIT, LARGEST_LIMIT, LIMIT
from api.problems import CONTENT_TYPE
from api.serializers.common import MomentOut
from api.serializers.readings import COMPONENTS
from api.serializers.shapes import In, Out

_AS_OF = OpenApiParameter(
    AS_OF,
    OpenApiTypes.STR,
    description="The register as it was: a change number, a time with its zone (RFC 3339), or a day (its end, UTC).",
    examples=[
        OpenApiExample("a change", value="812"),
        OpenApiExample("a time", value="2026-11-12T09:31:07Z"),
        OpenApiExample("a day", value="2026-11-12"),
    ],
)
_PAGES = (
    OpenApiParameter(CURSOR, OpenApiTypes.STR, description="Where the page begins, as the `next` link gave it."),
    OpenApiParameter(
        LIMIT,
        {"type": "integer", "minimum": 1, "maximum": LARGEST_LIMIT, "default": DEFAULT_LIMIT},
        description="Rows on a page.",
    ),
)
_IF_MATCH = OpenApiParameter(
    "If-Match",
    OpenApiTypes.STR,
    OpenApiParameter.HEADER,
    description="The ETag of what was read: the change is refused (412) if another one came in between.",
)


def operation(
    summary: str,
    *,
    name: str,
    gives: type[Out] | None,
    takes: type[In] | None = None,
    status: HTTPStatus = HTTPStatus.OK,
    as_of: bool = False,
    pages: bool = False,
    if_match: bool = False,
    filters: Mapping[str, str] | None = None,
    refuses: Iterable[str] = (),
    example: Mapping[str, Any] | None = None,
    public: bool = False,
) -> Callable[[Callable[..., Any]], Any]:
    """Describe a method of a view. ``refuses`` names the codes beyond those that every such operation can answer."""
    parameters = [
        *([_AS_OF] if as_of else []),
        *(_PAGES if pages else []),
        *([_IF_MATCH] if if_match else []),
        *(OpenApiParameter(field, OpenApiTypes.STR, description=text) for field, text in (filters or {}).items()),
    ]
    options: dict[str, Any] = {
        "operation_id": name,
        "summary": summary,
        "parameters": parameters,
        "request": takes,
        "responses": {int(status): _listed(gives, has_history=as_of) if pages and gives else gives},
        "extensions": {"x-problem-codes": sorted(refuses)} if refuses else {},
    }
    if example is not None:
        options["examples"] = [OpenApiExample("Example", value=example, request_only=True)]
    if public:
        options["auth"] = []
    return extend_schema(**options)


def _listed(row: type[Out], *, has_history: bool) -> type[serializers.Serializer]:
    """A page of rows."""
    fields: dict[str, Any] = {
        "__doc__": "A page of a list.",
        "results": row(many=True),
        "next": serializers.URLField(allow_null=True, help_text="The next page; null on the last."),
    }
    if has_history:
        fields["as_of"] = MomentOut(help_text="The moment that this and all further pages show.")
    return type(f"{row.__name__.removesuffix('Out')}PageOut", (Out,), fields)


# --- The hook ----------------------------------------------------------------------------------------------

_PROBLEM: dict[str, Any] = {
    "type": "object",
    "description": "Problem details (RFC 9457).",
    "required": ["type", "title", "status", "detail", "instance"],
    "properties": {
        "type": {
            "type": "string",
            "format": "uri-reference",
            "description": "`/problems/<code>`: stable, and a page that says what the code means.",
        },
        "title": {"type": "string", "description": "What the code means."},
        "status": {"type": "integer", "minimum": 400, "maximum": 599},
        "detail": {"type": "string", "description": "A sentence about this very case."},
        "instance": {"type": "string", "format": "uri-reference", "description": "What was asked for."},
        "errors": {
            "type": "array",
            "items": {
                "type": "object",
                "required": ["pointer", "code", "detail"],
                "properties": {
                    "pointer": {
                        "type": "string",
                        "description": "RFC 6901, into the body; for a parameter or a header, its name.",
                    },
                    "code": {"type": "string"},
                    "detail": {"type": "string"},
                },
            },
        },
    },
}

_ANSWERS: dict[HTTPStatus, tuple[str, ...]] = {
    HTTPStatus.BAD_REQUEST: ("malformed-json", "json-out-of-bounds", "bad-request"),
    HTTPStatus.UNAUTHORIZED: ("not-signed-in", "token-not-valid"),
    HTTPStatus.FORBIDDEN: ("role-missing", "scope-missing", "csrf-failed"),
    HTTPStatus.NOT_FOUND: ("not-here", "not-found"),
    HTTPStatus.NOT_ACCEPTABLE: ("not-acceptable",),
    HTTPStatus.CONFLICT: ("conflict",),
    HTTPStatus.LENGTH_REQUIRED: ("length-required",),
    HTTPStatus.PRECONDITION_FAILED: ("changed-meanwhile",),
    HTTPStatus.REQUEST_ENTITY_TOO_LARGE: ("body-too-large",),
    HTTPStatus.UNSUPPORTED_MEDIA_TYPE: ("unsupported-media-type",),
    HTTPStatus.UNPROCESSABLE_ENTITY: ("invalid",),
    HTTPStatus.TOO_MANY_REQUESTS: ("too-many-tries",),
    HTTPStatus.INTERNAL_SERVER_ERROR: ("server-error",),
}
# Codes of single operations, by the status they come with; all others come with 422.
_STATUS_OF_CODE = {
    **dict.fromkeys(
        ("slug-taken", "standing-already", "decided-already", "last-steward", "nothing-to-retry"), HTTPStatus.CONFLICT
    ),
    "sign-in-failed": HTTPStatus.UNAUTHORIZED,
    "not-allowed": HTTPStatus.FORBIDDEN,
    "too-many-tries": HTTPStatus.TOO_MANY_REQUESTS,
}


def complete(result: dict[str, Any], generator: Any, request: Any, public: bool) -> dict[str, Any]:
    """Postprocessing hook of the generator: error answers, headers, tags, closed request bodies, words on codes."""
    components = result.setdefault("components", {})
    schemas = components.setdefault("schemas", {})
    schemas |= {"Problem": _PROBLEM, **COMPONENTS}
    components["responses"] = {_response_name(status): _problem_answer(status, []) for status in _ANSWERS}
    components["headers"] = _HEADERS
    for name, schema in schemas.items():
        # Unknown fields are refused in what comes in; in what goes out, a client must expect new ones.
        if name.endswith("In") and "properties" in schema:
            schema["additionalProperties"] = False
        if schema.get("description") in (getdoc(In), getdoc(Out)):
            del schema["description"]
    for path, methods in result["paths"].items():
        for method, described in methods.items():
            described["tags"] = [_tag(path)]
            _add_headers(method, described)
            _add_problems(path, method, described)
    result["info"]["description"] = f"{result['info'].get('description', '')}\n\n{_words_on_codes()}"
    return result


_HEADERS: dict[str, Any] = {
    "Steelyard-Change": {
        "description": "The change number of the state that the answer was taken from, or that the change got.",
        "schema": {"type": "integer", "minimum": 0},
    },
    "Memento-Datetime": {
        "description": "The time of that change (RFC 7089); absent before the first.",
        "schema": {"type": "string"},
    },
    "ETag": {"description": "For If-None-Match and If-Match (RFC 9110).", "schema": {"type": "string"}},
    "Link": {"description": 'rel="next" (RFC 8288); absent on the last page.', "schema": {"type": "string"}},
    "Location": {
        "description": "The address of what was made.",
        "schema": {"type": "string", "format": "uri-reference"},
    },
    "WWW-Authenticate": {"description": "How to sign in.", "schema": {"type": "string"}},
    "Retry-After": {"description": "Seconds to wait.", "schema": {"type": "integer", "minimum": 0}},
}


def _tag(path: str) -> str:
    parts = path.removeprefix("/api/v1/").strip("/").split("/")
    return parts[2] if parts[0] == "evidence-bases" and len(parts) > 2 else parts[0]


def _is_public(described: dict[str, Any]) -> bool:
    """Whether strangers may call it: it names no way to sign in, or none as one of the ways."""
    return {} in described.get("security", [{}])


def _header(*names: str) -> dict[str, Any]:
    return {name: {"$ref": f"#/components/headers/{name}"} for name in names}


def _add_headers(method: str, described: dict[str, Any]) -> None:
    parameters = {parameter["name"] for parameter in described.get("parameters", ())}
    for status, answer in described["responses"].items():
        shape = str(answer.get("content", ""))
        names: list[str] = []
        if "base" in parameters and (method == "get" or "WrittenOut" in shape or "AddedOut" in shape):
            names += ["Steelyard-Change", "Memento-Datetime"]
        if method == "get" or "If-Match" in parameters:
            names += ["ETag"]
        if CURSOR in parameters:
            names += ["Link"]
        if status in ("201", "202") and not _is_public(described):
            names += ["Location"]
        if names:
            answer["headers"] = _header(*names)


def _add_problems(path: str, method: str, described: dict[str, Any]) -> None:
    in_base = "{base}" in path
    statuses = {
        HTTPStatus.BAD_REQUEST,
        HTTPStatus.NOT_ACCEPTABLE,
        HTTPStatus.UNPROCESSABLE_ENTITY,
        HTTPStatus.INTERNAL_SERVER_ERROR,
    }
    if not _is_public(described):
        statuses |= {HTTPStatus.UNAUTHORIZED, HTTPStatus.FORBIDDEN}
    if in_base:
        statuses.add(HTTPStatus.NOT_FOUND)
    if method in ("post", "patch"):
        statuses |= {
            HTTPStatus.LENGTH_REQUIRED,
            HTTPStatus.REQUEST_ENTITY_TOO_LARGE,
            HTTPStatus.UNSUPPORTED_MEDIA_TYPE,
        }
    if any(parameter["name"] == "If-Match" for parameter in described.get("parameters", ())):
        statuses.add(HTTPStatus.PRECONDITION_FAILED)
    own: dict[HTTPStatus, list[str]] = {}
    for code in described.get("x-problem-codes", ()):
        own.setdefault(_STATUS_OF_CODE.get(code, HTTPStatus.UNPROCESSABLE_ENTITY), []).append(code)
    for status in sorted(statuses | own.keys()):
        shared = {"$ref": f"#/components/responses/{_response_name(status)}"}
        answer = _problem_answer(status, own[status]) if status in own else shared
        described["responses"].setdefault(str(int(status)), answer)


def _response_name(status: HTTPStatus) -> str:
    """The name of a status among the shared answers. Words of a status differ between versions of Python."""
    return f"Problem{int(status)}"


def _problem_answer(status: HTTPStatus, own: list[str]) -> dict[str, Any]:
    codes = list(dict.fromkeys([*own, *_ANSWERS[status]]))
    answer: dict[str, Any] = {
        "description": "; ".join(f"`{code}`: {title_of(code, code)}" for code in codes) + ".",
        "content": {
            CONTENT_TYPE: {
                "schema": {"$ref": "#/components/schemas/Problem"},
                "example": _example(status, codes[0]),
            }
        },
    }
    if status is HTTPStatus.UNAUTHORIZED:
        answer["headers"] = _header("WWW-Authenticate")
    if status is HTTPStatus.TOO_MANY_REQUESTS:
        answer["headers"] = _header("Retry-After")
    return answer


def _example(status: HTTPStatus, code: str) -> dict[str, Any]:
    title = title_of(code, code)
    return {
        "type": f"/problems/{code}",
        "title": title,
        "status": int(status),
        "detail": f"{title}.",
        "instance": "/api/v1/…",
    }


def _words_on_codes() -> str:
    lines = [f"* `{code.name}`: {code.title.rstrip('.')}." for code in all_codes().values()]
    return "## Problem codes\n\nEach has a page at `/problems/<code>/`.\n\n" + "\n".join(lines)
