"""The description of the service: valid OpenAPI 3.1, complete, and true of its own examples.

That answers keep to it is checked on every answer of every test here (``tests.api.description``).
"""

import ast
import json
from collections.abc import Iterator
from io import StringIO
from pathlib import Path
from typing import Any

import pytest
import yaml
from django.core.management import call_command
from openapi_schema_validator import OAS31Validator, oas31_format_checker
from openapi_spec_validator import OpenAPIV31SpecValidator
from referencing import Registry, Resource
from referencing.jsonschema import DRAFT202012

from api.codes import all_codes
from api.serializers.readings import READING
from api.urls import urlpatterns
from api.views.schema import description
from evidence.readings import Kind, read
from tests.api.program import Program
from tests.register import ready_made, two_proportions

PROJECT = Path(__file__).resolve().parents[2]
NAME = "urn:steelyard:description"


@pytest.fixture(scope="module")
def served() -> dict[str, Any]:
    return json.loads(json.dumps(description()))


def operations(served: dict[str, Any]) -> Iterator[tuple[str, str, dict[str, Any]]]:
    for path, methods in served["paths"].items():
        for method, operation in methods.items():
            yield path, method, operation


def valid_as(served: dict[str, Any], pointer: str, value: Any) -> list[str]:
    """What keeps a value from being of the shape at a place of the description."""
    registry = Registry().with_resource(NAME, Resource.from_contents(served, default_specification=DRAFT202012))
    validator = OAS31Validator({"$ref": f"{NAME}#{pointer}"}, registry=registry, format_checker=oas31_format_checker)
    return [error.message for error in validator.iter_errors(value)]


def test_the_description_is_valid_openapi(served: dict[str, Any]) -> None:
    assert served["openapi"].startswith("3.1")
    assert [error.message for error in OpenAPIV31SpecValidator(served).iter_errors()] == []


def test_it_is_generated_without_a_warning(capsys: pytest.CaptureFixture[str]) -> None:
    out = StringIO()
    call_command("spectacular", "--validate", "--fail-on-warn", stdout=out)
    assert yaml.safe_load(out.getvalue())["info"]["title"] == "Steelyard"
    assert "Warning" not in capsys.readouterr().err


def test_it_uses_no_keyword_of_the_earlier_version(served: dict[str, Any]) -> None:
    def keys(node: Any) -> Iterator[str]:
        if isinstance(node, dict):
            for key, value in node.items():
                yield key
                yield from keys(value)
        elif isinstance(node, list):
            for value in node:
                yield from keys(value)

    assert "nullable" not in set(keys(served))


def test_it_has_every_route(served: dict[str, Any]) -> None:
    assert len(served["paths"]) == len(urlpatterns) - 1, "every route but that of the description itself"


def test_every_operation_has_a_name_of_its_own_a_summary_and_its_errors(served: dict[str, Any]) -> None:
    names = [operation["operationId"] for _, _, operation in operations(served)]
    assert len(names) == len(set(names))
    for path, method, operation in operations(served):
        where = f"{method} {path}"
        assert operation["summary"], where
        assert {"400", "406", "422", "500"} <= operation["responses"].keys(), where
        if path != "/api/v1/sign-in/":
            assert {"401", "403"} <= operation["responses"].keys(), where
        if "{base}" in path:
            assert "404" in operation["responses"], where
        if method in ("post", "patch"):
            assert {"411", "413", "415"} <= operation["responses"].keys(), where


def test_what_comes_in_is_closed_to_unknown_fields(served: dict[str, Any]) -> None:
    for path, method, operation in operations(served):
        if "requestBody" in operation:
            shape = operation["requestBody"]["content"]["application/json"]["schema"]["$ref"].rpartition("/")[2]
            assert served["components"]["schemas"][shape]["additionalProperties"] is False, f"{method} {path}"


def test_every_write_has_an_example_that_is_of_its_shape(served: dict[str, Any]) -> None:
    for path, method, operation in operations(served):
        if "requestBody" not in operation:
            continue
        content = operation["requestBody"]["content"]["application/json"]
        pointer = content["schema"]["$ref"].removeprefix("#")
        examples = [example["value"] for example in content["examples"].values()]
        assert examples, f"{method} {path}"
        for example in examples:
            assert valid_as(served, pointer, example) == [], f"{method} {path}"


def test_every_code_an_operation_names_is_in_the_catalogue(served: dict[str, Any]) -> None:
    named = {code for _, _, operation in operations(served) for code in operation.get("x-problem-codes", ())}
    assert named - all_codes().keys() == set()


GOOD_READINGS = [
    ready_made(),
    ready_made() | {"observations": None, "interval": {"level": "0.95", "low": "0.1", "high": "0.3"}},
    two_proportions() | {"cluster": {"average_size": "29.8", "accounted_for": False}},
    {
        "kind": "two-means",
        "treated": {"mean": "10.1", "standard_deviation": "2", "observations": 30},
        "control": {"mean": "9", "standard_deviation": "2.2", "observations": 31},
    },
    {"kind": "correlation", "correlation": "-0.50", "observations": 100},
    {
        "kind": "regression",
        "outcome": {"scale": "logarithm"},
        "exposure": {"scale": "level", "unit": "messages", "mean": "2.1"},
        "terms": [
            {"form": "linear", "coefficient": "0.052", "standard_error": "0.018"},
            {"form": "interaction", "with": "distance", "at": "3.2", "coefficient": "-0.004", "t": "-1.9"},
        ],
        "covariances": [{"between": ["linear", "interaction:distance"], "value": "0.00001"}],
        "marginal_effect": {"estimate": "0.04", "p_below": "0.05"},
        "observations": 1240,
    },
]
BAD_READINGS = [
    {},
    {"kind": "odds"},
    ready_made() | {"standart_error": "1"},
    ready_made() | {"estimate": 0.2},
    two_proportions() | {"treated": {"events": "4", "total": 123}},
]


@pytest.mark.parametrize("reading", GOOD_READINGS, ids=lambda reading: reading["kind"])
def test_the_shape_of_a_reading_and_its_reader_agree_on_what_is_well_formed(
    served: dict[str, Any], reading: dict[str, Any]
) -> None:
    assert valid_as(served, "/components/schemas/Reading", reading) == []
    assert valid_as(served, "/components/schemas/Reading", read(reading).as_json()) == []


@pytest.mark.parametrize("reading", BAD_READINGS)
def test_the_shape_of_a_reading_and_its_reader_agree_on_what_is_not(
    served: dict[str, Any], reading: dict[str, Any]
) -> None:
    assert valid_as(served, "/components/schemas/Reading", reading) != []
    with pytest.raises(ValueError):
        read(reading)


def test_the_shape_of_a_reading_has_every_kind() -> None:
    assert [kind["title"] for kind in READING["oneOf"]] == [str(kind) for kind in Kind]


@pytest.mark.django_db
@pytest.mark.parametrize(
    ("accept", "parameters", "kind"),
    [
        ("application/json", {}, "application/json"),
        ("*/*", {}, "application/json"),
        ("application/vnd.oai.openapi", {}, "application/vnd.oai.openapi"),
        ("*/*", {"format": "json"}, "application/"),
        ("*/*", {"format": "yaml"}, "application/"),
    ],
)
def test_it_is_served_as_json_and_yaml(accept: str, parameters: dict[str, str], kind: str) -> None:
    answer = Program().get("/api/v1/schema/", parameters, headers={"Accept": accept})
    assert answer.status_code == 200
    assert answer["Content-Type"].startswith(kind)
    # JSON is YAML.
    assert yaml.safe_load(answer.content)["openapi"].startswith("3.1")
    again = Program().get("/api/v1/schema/", parameters, headers={"Accept": accept, "If-None-Match": answer["ETag"]})
    assert again.status_code == 304


# --- Codes -------------------------------------------------------------------------------------------------


def codes_in(tree: ast.AST) -> Iterator[str]:
    """Codes that a module's source sends: arguments of problems and errors, and the codes of error classes."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            name = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
            if name in ("FieldProblem", "field") and len(node.args) >= 3 and isinstance(node.args[1], ast.Constant):
                yield node.args[1].value
            if name in ("Conflict", "NotAllowed", "NotHere", "NotSignedIn", "Invalid"):
                yield from (
                    k.value.value for k in node.keywords if k.arg == "code" and isinstance(k.value, ast.Constant)
                )
        if isinstance(node, ast.ClassDef):
            for statement in node.body:
                if isinstance(statement, ast.Assign) and isinstance(statement.value, ast.Constant):
                    names = {target.id for target in statement.targets if isinstance(target, ast.Name)}
                    if names & {"code", "default_code"} and isinstance(statement.value.value, str):
                        yield statement.value.value


def test_every_code_that_the_source_sends_is_in_the_catalogue() -> None:
    sent = {
        code
        for package in ("evidence", "analysis", "api")
        for file in sorted((PROJECT / package).rglob("*.py"))
        for code in codes_in(ast.parse(file.read_text(encoding="utf-8")))
    }
    assert len(sent) > 50, "the search itself still works"
    assert sent - all_codes().keys() == set()


@pytest.mark.django_db
@pytest.mark.parametrize("code", all_codes().values(), ids=lambda code: code.name)
def test_every_code_has_a_page_that_says_what_it_means(code: Any) -> None:
    for path in (f"/problems/{code.name}", f"/problems/{code.name}/"):
        page = Program().get(path)
        assert page.status_code == 200
        assert code.name in page.content.decode()


@pytest.mark.django_db
def test_the_codes_have_an_index_and_no_other_pages() -> None:
    index = Program().get("/problems/").content.decode()
    assert all(f"/problems/{name}/" in index for name in all_codes())
    assert Program().get("/problems/no-such-code/").status_code == 404
