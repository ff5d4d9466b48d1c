"""The whole road through the API, from signing in to an answer that moves, and back to the past."""

import pytest

from analysis.recompute import run
from tests.api.program import Program
from tests.register import PASSWORD, a_person, two_proportions

pytestmark = pytest.mark.django_db


def test_a_session_from_sign_in_to_an_answer_that_moves() -> None:
    person = a_person(may_create=True)
    stranger = Program()
    signed = stranger.write("/api/v1/sign-in/", {"email": person.email, "password": PASSWORD})
    steward = Program(signed["token"], "harbour")
    steward.write("/api/v1/evidence-bases/", {"slug": "harbour", "name": "Harbour districts"})
    issued = steward.write("tokens/", {"name": "Script", "scopes": ["read", "code", "review", "steward"]})
    script = Program(issued["token"], "harbour")
    script.write(
        "questions/",
        {
            "slug": "vaccine",
            "title": "Does the vaccine prevent the disease?",
            "intervention": "the vaccine",
            "outcome": "the disease",
            "metric": "log-risk-ratio",
            "good_direction": "lower",
            "smallest_effect": "0.10",
        },
    )
    adopted = script.write("questions/vaccine/protocols/", {"plan": {}, "reason": "First protocol."})
    assert adopted["requests"], "a protocol asks for the first answer"
    papers = []
    for events, total, control, control_total in ((4, 123, 11, 139), (6, 306, 29, 303), (3, 231, 11, 220)):
        papers.append(
            script.write(
                "papers/",
                {
                    "title": f"Trial with {total} people",
                    "kind": "article",
                    "published_on": "1950",
                    "authors": ["Doe, Jane"],
                    "study": {"label": f"Trial {total}"},
                    "estimates": [
                        {
                            "questions": ["vaccine"],
                            "locator": {"table": "2"},
                            "reading": two_proportions(events, total, control, control_total),
                        }
                    ],
                },
            )
        )
    assert run(papers[-1]["requests"][0]["id"])
    answer = script.read("questions/vaccine/answer/")
    assert (answer["papers"], answer["preliminary"], answer["pending_requests"]) == (3, False, [])
    assert answer["effect"]["value"] < 0
    assert len(script.read("questions/vaccine/effects/")["results"]) == 3
    assert script.read("questions/vaccine/trail/")["steps"][-1]["papers"] == 3
    assert script.read(f"syntheses/{answer['synthesis']}/")["synthesis"] == answer["synthesis"]

    retraction = script.write(
        f"papers/{papers[0]['id']}/retraction/", {"reason": "The data could not be found.", "on": "2020-01-01"}
    )
    assert script.read("questions/vaccine/answer/")["preliminary"] is True
    assert run(retraction["requests"][0]["id"])
    assert script.read("questions/vaccine/answer/")["papers"] == 2
    before = script.read("questions/vaccine/answer/", as_of=papers[-1]["change"])
    assert before["effect"] == answer["effect"]
    assert script.read(f"requests/{retraction['requests'][0]['id']}/")["state"] == "done"
