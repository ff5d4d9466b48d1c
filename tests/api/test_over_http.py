"""What only a real connection shows: a body that is still being sent when it has been refused already."""

import json
import urllib.error
import urllib.request
from typing import Any

import pytest

from evidence.models import Change
from tests.api.program import program, signed_in
from tests.register import a_base

pytestmark = pytest.mark.django_db(transaction=True)

TWENTY_MEGABYTES = b'{"title": "' + b"x" * 20_000_000 + b'"}'


def send(url: str, body: bytes, token: str | None) -> tuple[int, Any]:
    """Status and problem, with the client of the standard library, which sends all before it reads anything."""
    headers = {"Content-Type": "application/json", **({"Authorization": f"Token {token}"} if token else {})}
    with pytest.raises(urllib.error.HTTPError) as refused:
        urllib.request.urlopen(urllib.request.Request(url, data=body, headers=headers), timeout=60)
    with refused.value as answer:
        return answer.code, json.load(answer)


@pytest.mark.parametrize("known", [True, False])
def test_a_body_of_20_mb_is_told_why_it_is_refused(live_server: Any, known: bool) -> None:
    client = program(a_base())
    before = Change.objects.count()
    status, problem = send(live_server.url + client.at("papers/"), TWENTY_MEGABYTES, client.token if known else None)
    assert (status, problem["type"]) == (
        (413, "/problems/body-too-large") if known else (401, "/problems/not-signed-in")
    )
    assert Change.objects.count() == before


def test_head_sends_headers_alone(live_server: Any) -> None:
    client = signed_in(a_base())
    asked = urllib.request.Request(f"{live_server.url}/api/v1/evidence-bases/", method="HEAD")
    asked.add_header("Authorization", f"Token {client.token}")
    with urllib.request.urlopen(asked, timeout=30) as answer:
        assert answer.read() == b""
        assert int(answer.headers["Content-Length"]) == len(client.get("/api/v1/evidence-bases/").content)
