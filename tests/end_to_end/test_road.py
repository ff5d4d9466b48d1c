"""The whole road with real processes: papers arrive over HTTP, the answer moves, and nothing is lost on the way.

Data: the 13 trials of the BCG vaccine (Colditz et al. 1994, JAMA 271; 2x2 tables through an open data set). Expected
values were computed independently of this project from the same tables, by year then trial number; the pooled risk
ratio agrees with the published 0.49 (0.34 to 0.70), quoted from memory.
"""

import csv
import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import psycopg
import pytest

from tests.end_to_end.service import HttpAnswer, RunningService, running_service

DATA = Path(__file__).resolve().parents[2] / "fixtures" / "check_data"
PASSWORD = "a long enough pass phrase"
TOLERANCE = 1e-6  # what the issue of this service promises for iterative estimates


def table(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


TRIALS = sorted(table("bcg.csv"), key=lambda row: (int(row["year"]), int(row["study"])))
TRAIL = table("bcg_trail.csv")
WITHOUT = {row["omitted_study"]: row for row in table("bcg_leave_one_out.csv")}


@dataclass
class Client:
    """A program that knows its token and its evidence base."""

    service: RunningService
    token: str = ""
    base: str = "/api/v1/evidence-bases/tuberculosis"
    papers: dict[str, str] = field(default_factory=dict)

    def sent(self, method: str, path: str, body: Any = None) -> HttpAnswer:
        return self.service.call(method, path, body, token=self.token)

    def made(self, path: str, body: Any) -> Any:
        answer = self.sent("POST", path, body)
        assert answer.status in {200, 201}, answer.body
        return answer.json

    def read(self, path: str) -> Any:
        answer = self.sent("GET", path)
        assert answer.status == 200, answer.body
        return answer.json

    def set_up(self, *, email: str = "officer@example.org") -> None:
        """A person, a sign-in, an evidence base, a token in it, a question and its protocol."""
        self.service.manage(
            "create_person", email, "Evidence Officer", "--may-create-evidence-bases", stdin=PASSWORD + "\n"
        )
        self.token = self.made("/api/v1/sign-in/", {"email": email, "password": PASSWORD})["token"]
        self.made("/api/v1/evidence-bases/", {"slug": "tuberculosis", "name": "Tuberculosis"})
        scopes = ["read", "code", "review", "steward"]
        self.token = self.made(f"{self.base}/tokens/", {"name": "road", "scopes": scopes})["token"]
        self.made(
            f"{self.base}/questions/",
            {
                "slug": "bcg",
                "title": "Does BCG vaccination prevent tuberculosis?",
                "intervention": "BCG vaccination",
                "intervention_is_plural": False,
                "comparison": "no vaccination",
                "outcome": "tuberculosis",
                "population": "people at risk",
                "metric": "log-risk-ratio",
                "good_direction": "lower",
            },
        )
        self.made(
            f"{self.base}/questions/bcg/protocols/",
            {
                "plan": {"heterogeneity": "restricted-maximum-likelihood", "interval": "hartung-knapp"},
                "reason": "The road is walked with it.",
            },
        )

    def post_trial(self, trial: dict[str, str]) -> Any:
        """One trial as one paper; its recompute requests are in what comes back."""
        # Trials 5 and 7 both appeared in 1973, and papers of one date enter together: the month, from memory, sets
        # them apart as they stand in the published order.
        published_on = "1973-08" if trial["study"] == "7" else trial["year"]
        added = self.made(
            f"{self.base}/papers/",
            {
                "title": f"Trial {trial['study']} of the BCG vaccine",
                "kind": "article",
                "label": f"Trial {trial['study']}",
                "published_on": published_on,
                "study": {"label": f"Trial {trial['study']}", "design": "trial"},
                "estimates": [
                    {
                        "questions": ["bcg"],
                        "locator": {"page": "698", "table": "1", "row": f"Trial {trial['study']}"},
                        "reading": {
                            "kind": "two-proportions",
                            "treated": {"events": int(trial["tb_vac"]), "total": int(trial["n_vac"])},
                            "control": {"events": int(trial["tb_ctl"]), "total": int(trial["n_ctl"])},
                        },
                        "characteristics": {"latitude": trial["latitude"]},
                    }
                ],
            },
        )
        self.papers[trial["study"]] = added["id"]
        return added

    def settled(self, *, papers: int) -> Any:
        """The answer once it is no longer preliminary and rests on so many papers."""

        def ask() -> Any:
            answer = self.read(f"{self.base}/questions/bcg/answer/")
            return answer if answer["effect"] and not answer["preliminary"] and answer["papers"] == papers else None

        return self.service.wait_for(ask, seconds=90, what=f"an answer from {papers} papers")

    def trail(self, **query: object) -> list[dict[str, Any]]:
        text = "&".join(f"{name}={value}" for name, value in query.items())
        steps: list[dict[str, Any]] = self.read(f"{self.base}/questions/bcg/trail/?{text}")["steps"]
        return steps


def close(found: float, expected: str) -> bool:
    return math.isclose(found, float(expected), rel_tol=TOLERANCE, abs_tol=TOLERANCE)


def walk(client: Client) -> None:
    """Post every trial; after each the trail is one step longer and ends at the reference."""
    for count, (trial, expected) in enumerate(zip(TRIALS, TRAIL, strict=True), start=1):
        client.post_trial(trial)
        answer = client.settled(papers=count)
        steps = client.trail()
        assert len(steps) == count
        assert close(steps[-1]["value"], expected["reml_mu"])
        assert close(answer["effect"]["value"], expected["reml_mu"])
        assert close(answer["effect"]["standard_error"], expected["reml_se"])
        assert close(answer["heterogeneity"]["tau_squared"], expected["reml_tau2"])
        assert close(answer["heterogeneity"]["q"], expected["Q"])


def nothing_lost_nothing_twice(service: RunningService) -> None:
    """Every request ended done, and every digest stands once."""
    unfinished = "SELECT count(*) FROM analysis_recomputerequest WHERE state <> 'done'"
    service.wait_for(lambda: service.query(unfinished) == [(0,)], seconds=60, what="every request to be done")
    assert service.query("SELECT digest FROM analysis_synthesis GROUP BY digest HAVING count(*) > 1") == []
    assert (
        service.query("SELECT question_id, change_number FROM analysis_answer GROUP BY 1, 2 HAVING count(*) > 1") == []
    )
    # The newest touch of every question has its answer.
    assert service.query(
        "SELECT max(c.change_number) - max(a.change_number) FROM evidence_questionchange c "
        "JOIN analysis_answer a USING (question_id) GROUP BY c.question_id"
    ) == [(0,)]
    assert "0 different" in service.manage("prove_syntheses")


SETTINGS = {"STEELYARD_LEASE_SECONDS": "3"}

KINDS = [
    pytest.param("files", id="files-and-embedded-postgresql"),
    pytest.param("postgres", id="files-and-external-postgresql", marks=pytest.mark.postgres),
    pytest.param("redis", id="redis", marks=pytest.mark.redis),
    pytest.param("rabbitmq", id="rabbitmq", marks=pytest.mark.rabbitmq),
]


@pytest.fixture(params=KINDS)
def client(request: pytest.FixtureRequest) -> Iterator[Client]:
    """A program at work on a service of each kind."""
    options: dict[str, Any] = {"broker": "filesystem://"}
    if request.param in {"redis", "rabbitmq"}:
        options["broker"] = request.getfixturevalue(f"{request.param}_url")
    if request.param == "postgres":
        options["database_url"] = request.getfixturevalue("postgres_url")
    with running_service(environment=SETTINGS, **options) as service:
        client = Client(service)
        client.set_up()
        yield client


@pytest.mark.timeout(600)
def test_thirteen_trials_arrive_one_retracts_and_the_past_stays_readable(client: Client) -> None:
    walk(client)
    before = client.read(f"{client.base}/questions/bcg/answer/")
    assert before["as_of"]["change"] > 13
    assert len(before["cautions"]) >= 3
    assert "lowers the risk of tuberculosis" in before["sentence"]

    retracted = client.made(
        f"{client.base}/papers/{client.papers['8']}/retraction/", {"reason": "For the test.", "on": "2024-05-01"}
    )
    after = client.settled(papers=12)
    assert close(after["effect"]["value"], WITHOUT["8"]["reml_mu"])
    assert close(after["effect"]["standard_error"], WITHOUT["8"]["reml_se"])
    assert len(client.trail()) == 12

    then = client.read(f"{client.base}/questions/bcg/answer/?as_of={retracted['change'] - 1}")
    assert then["effect"] == before["effect"]
    assert then["synthesis"] == before["synthesis"]
    assert len(client.trail(as_of=retracted["change"] - 1)) == 13
    nothing_lost_nothing_twice(client.service)


@pytest.mark.timeout(600)
def test_a_worker_killed_in_the_middle_of_a_job_loses_nothing(client: Client) -> None:
    service = client.service
    for trial in TRIALS[:6]:
        client.post_trial(trial)
    client.settled(papers=6)
    # Holding the table of syntheses stops the worker just before it writes: it is killed there, with the claim held.
    with psycopg.connect(service.database_url) as holding:
        holding.execute("LOCK TABLE analysis_synthesis IN SHARE MODE")
        for trial in TRIALS[6:]:
            client.post_trial(trial)
        running = "SELECT count(*) FROM analysis_recomputerequest WHERE state = 'running'"
        service.wait_for(lambda: service.query(running) != [(0,)], what="a job to be running")
        service.kill_worker()
    # A worker has two processes, and the next request of the question may have been taken up by the other.
    assert service.query(running)[0][0] >= 1
    service.start_worker()
    answer = client.settled(papers=13)
    assert close(answer["effect"]["value"], TRAIL[-1]["reml_mu"])
    nothing_lost_nothing_twice(service)
    attempts = service.query("SELECT max(attempts) FROM analysis_recomputerequest")
    assert attempts[0][0] >= 2


@pytest.mark.timeout(600)
def test_a_queue_emptied_by_force_loses_nothing(client: Client) -> None:
    service = client.service
    service.kill_worker()
    for trial in TRIALS:
        client.post_trial(trial)
    queued = "SELECT count(*) FROM analysis_recomputerequest WHERE state = 'queued'"
    assert service.query(queued) == [(1,)]
    service.empty_queue()
    assert service.queue_length() == 0
    service.start_worker()
    answer = client.settled(papers=13)
    assert close(answer["effect"]["value"], TRAIL[-1]["reml_mu"])
    nothing_lost_nothing_twice(service)
