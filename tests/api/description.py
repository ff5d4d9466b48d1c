"""Checks of answers against the OpenAPI description that the service itself serves.

The description is read as a client would read it; JSON Schema is judged by ``openapi_schema_validator``, not by code of
this project. Answers are held to it more strictly than clients are told to be: a field it does not name is an error.
"""

import copy
import json
import re
from functools import cache
from typing import Any

from django.http import HttpResponse
from openapi_schema_validator import OAS31Validator, oas31_format_checker
from referencing import Registry, Resource
from referencing.jsonschema import DRAFT202012

from api.views.schema import description

_NAME = "urn:steelyard:description"


@cache
def _strict() -> dict[str, Any]:
    """The description as it is served, with every shape of an answer closed to fields that it does not name."""
    served = json.loads(json.dumps(description()))
    closed = copy.deepcopy(served)
    for name, schema in closed["components"]["schemas"].items():
        if name.endswith("Out") or name == "Problem":
            schema["unevaluatedProperties"] = False
    return closed


@cache
def _registry() -> Registry:
    return Registry().with_resource(_NAME, Resource.from_contents(_strict(), default_specification=DRAFT202012))


@cache
def _routes() -> list[tuple[re.Pattern[str], str]]:
    return [
        (re.compile(re.sub(r"\\\{[^}]*\\\}", "[^/]+", re.escape(path))), path) for path in sorted(_strict()["paths"])
    ]


def described(method: str, path: str) -> dict[str, Any] | None:
    """The description of a method at an address; None when there is none."""
    for pattern, template in _routes():
        if pattern.fullmatch(path):
            return _strict()["paths"][template].get(method.lower())
    return None


def check_against_description(method: str, path: str, answer: HttpResponse) -> None:
    """Fail when an answer is not one that the description promises."""
    if method == "HEAD":
        assert answer.content == b""
        return
    operation = described(method, path)
    if answer.status_code >= 400 and path.startswith("/api/"):
        assert answer["Content-Type"] == "application/problem+json", (answer["Content-Type"], answer.content)
        _check({"$ref": "#/components/schemas/Problem"}, answer)
    if operation is None:
        return
    status = str(answer.status_code)
    assert status in operation["responses"] or status in ("304", "405"), f"{method} {path} does not describe {status}"
    if answer.status_code < 300 and answer.status_code != 204:
        found = operation["responses"][status]
        _check(found["content"]["application/json"]["schema"], answer)
        for name in found.get("headers", {}):
            if name not in ("Link", "Memento-Datetime"):
                assert answer.has_header(name), f"{method} {path} promises {name}"


def _check(schema: dict[str, Any], answer: HttpResponse) -> None:
    # Every answer is a shape with a name; looked up from outside, its own references stay within the description.
    named = {"$ref": _NAME + schema["$ref"]}
    validator = OAS31Validator(named, registry=_registry(), format_checker=oas31_format_checker)
    content = json.loads(answer.content)
    errors = [f"{error.json_path}: {error.message}" for error in validator.iter_errors(content)]
    assert not errors, f"{errors}\n{json.dumps(content, indent=1)[:3000]}"
