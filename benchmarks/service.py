"""How fast is the service? Through the real stack: HTTP, PostgreSQL, queue, worker.

The yardstick of each is a bare JSON view of the same web server in the same run, which touches no database. A ratio
below one is expected: it says what share of the bare server's speed is left once the work is done.

One question holds 500 estimates from 70 papers before anything is measured.
"""

import http.client
import json
import statistics
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from functools import cache
from typing import Any
from urllib.parse import urlsplit

import numpy as np

from benchmarks.report import Result
from tests.end_to_end.service import RunningService, running_service

PASSWORD = "a long enough pass phrase"
BASE = "/api/v1/evidence-bases/bench"
PAPERS, ESTIMATES = 70, 500


class Connection:
    """One kept connection, as a program would use; a new one for each request would measure the sockets."""

    def __init__(self, service: RunningService, token: str = "") -> None:
        self.http = http.client.HTTPConnection(urlsplit(service.base_url).netloc, timeout=60)
        self.headers = {"Accept": "application/json", "Content-Type": "application/json"}
        if token:
            self.headers["Authorization"] = f"Token {token}"

    def call(self, method: str, path: str, body: Any = None) -> Any:
        self.http.request(method, path, json.dumps(body) if body is not None else None, self.headers)
        answer = self.http.getresponse()
        text = answer.read()
        if answer.status >= 400:
            raise AssertionError(f"{method} {path}: {answer.status} {text[:400]!r}")
        return json.loads(text)


def a_paper(number: int, rng: np.random.Generator, estimates: int) -> dict[str, Any]:
    """An invented paper with several ready-made effects."""
    true = 0.04 + 0.03 * rng.standard_normal()
    rows = []
    for row in range(estimates):
        error = float(np.exp(rng.uniform(np.log(0.01), np.log(0.06))))
        rows.append(
            {
                "questions": ["bench"],
                "locator": {"page": "9", "table": "2", "row": str(row + 1)},
                "reading": {
                    "kind": "ready-made-effect",
                    "metric": "semi-elasticity",
                    "estimate": f"{true + error * rng.standard_normal():.4f}",
                    "standard_error": f"{max(error, 0.0005):.4f}",
                },
            }
        )
    return {
        "title": f"Invented paper {number}",
        "label": f"Invented {number}",
        "kind": "article",
        "published_on": f"{1990 + number % 35}-{1 + number % 12:02d}",
        "study": {"label": f"Invented study {number}"},
        "estimates": rows,
    }


@contextmanager
def prepared() -> Iterator[tuple[RunningService, str]]:
    with running_service(web_processes=2, worker_processes=2) as service:
        service.manage(
            "create_person", "bench@example.org", "Bench", "--may-create-evidence-bases", stdin=PASSWORD + "\n"
        )
        first = Connection(service)
        signed = first.call("POST", "/api/v1/sign-in/", {"email": "bench@example.org", "password": PASSWORD})
        personal = Connection(service, signed["token"])
        personal.call("POST", "/api/v1/evidence-bases/", {"slug": "bench", "name": "Bench", "is_invented": True})
        scopes = ["read", "code", "review", "steward"]
        token = personal.call("POST", f"{BASE}/tokens/", {"name": "bench", "scopes": scopes})["token"]
        program = Connection(service, token)
        program.call(
            "POST",
            f"{BASE}/questions/",
            {
                "slug": "bench",
                "title": "How fast?",
                "intervention": "work",
                "intervention_is_plural": False,
                "outcome": "speed",
                "metric": "semi-elasticity",
                "good_direction": "higher",
            },
        )
        program.call("POST", f"{BASE}/questions/bench/protocols/", {"plan": {}, "reason": "To measure with."})
        rng = np.random.default_rng(7)
        for number in range(PAPERS):
            size = ESTIMATES // PAPERS + (number < ESTIMATES % PAPERS)
            program.call("POST", f"{BASE}/papers/", a_paper(number, rng, size))
        wait_for_answer(program, ESTIMATES)
        yield service, token


def wait_for_answer(program: Connection, estimates: int) -> float:
    """Poll until the answer rests on so many estimates; returns how long the last poll took, in seconds."""
    deadline = time.monotonic() + 120
    while time.monotonic() < deadline:
        answer = program.call("GET", f"{BASE}/questions/bench/answer/")
        if answer["effect"] and not answer["preliminary"] and answer["estimates"] == estimates:
            return time.monotonic()
        time.sleep(0.002)
    raise AssertionError(f"no answer from {estimates} estimates within two minutes")


@cache
def measured() -> dict[str, float]:
    """Everything, in one run of the service, so that each figure has its yardstick beside it."""
    figures: dict[str, float] = {}
    with ExitStack() as stack:
        service, token = stack.enter_context(prepared())
        program = Connection(service, token)
        rng = np.random.default_rng(11)

        def bare() -> None:
            program.call("GET", "/health/live")

        def read() -> None:
            program.call("GET", f"{BASE}/questions/bench/answer/")

        bare_times, read_times = interleaved(bare, read, rounds=300)
        figures["bare seconds"] = statistics.median(bare_times)
        figures["read seconds"] = statistics.median(read_times)

        latencies = []
        for number in range(20):
            started = time.monotonic()
            program.call("POST", f"{BASE}/papers/", a_paper(1000 + number, rng, 1))
            latencies.append(wait_for_answer(program, ESTIMATES + number + 1) - started)
        figures["change to answer seconds"] = statistics.median(latencies)

        # Without a worker beside it, so that posting is measured and not the sharing of two cores.
        service.stop_worker()
        # The kept connection was idle meanwhile, and the server closes idle ones.
        program = Connection(service, token)
        serial = iter(range(2000, 10_000))

        def post() -> None:
            program.call("POST", f"{BASE}/papers/", a_paper(next(serial), rng, 1))

        bare_times, post_times = interleaved(bare, post, rounds=150)
        figures["post seconds"] = statistics.median(post_times)
        figures["bare seconds beside posts"] = statistics.median(bare_times)
    return figures


def interleaved(first: Callable[[], None], second: Callable[[], None], rounds: int) -> tuple[list[float], list[float]]:
    """Times of two calls made in turn, so that a drift of the machine's speed meets both alike."""
    times: tuple[list[float], list[float]] = ([], [])
    for run in (first, second):
        run()
    for _ in range(rounds):
        for place, run in enumerate((first, second)):
            started = time.perf_counter()
            run()
            times[place].append(time.perf_counter() - started)
    return times


def change_to_answer() -> Result:
    """From sending a paper to reading the answer that counts it."""
    figures = measured()
    ours, yardstick = figures["change to answer seconds"], figures["bare seconds"]
    return {
        "name": "change-to-answer-500",
        "value": ours * 1e3,
        "unit": "ms",
        "yardstick": yardstick * 1e3,
        "ratio": yardstick / ours,
        "note": "median of 20; one more estimate in a question of 500; yardstick: one request to a bare JSON view",
    }


def per_second(name: str, ours: float, yardstick: float, note: str) -> Result:
    return {
        "name": name,
        "value": 1 / ours,
        "unit": "1/s",
        "yardstick": 1 / yardstick,
        "ratio": yardstick / ours,
        "note": note,
    }


def posts_per_second() -> Result:
    """Papers with one estimate each, one client."""
    figures = measured()
    return per_second(
        "posts-per-second",
        figures["post seconds"],
        figures["bare seconds beside posts"],
        "one client, one estimate a paper, no worker running; yardstick: a bare JSON view in turn with it",
    )


def question_reads_per_second() -> Result:
    """The answer of a question of 500 estimates, one client."""
    figures = measured()
    return per_second(
        "question-reads-per-second",
        figures["read seconds"],
        figures["bare seconds"],
        "one client; yardstick: a bare JSON view in turn with it",
    )


BENCHMARKS: dict[str, Callable[[], Result]] = {
    "change-to-answer-500": change_to_answer,
    "posts-per-second": posts_per_second,
    "question-reads-per-second": question_reads_per_second,
}

if __name__ == "__main__":
    from benchmarks.report import report

    report([BENCHMARKS])
