"""A real browser on a live server. Every message of the console and every request elsewhere fails the test.

This file is read before Django has its settings (`tests/conftest.py` makes them): what needs Django is imported where
it is used.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING
from urllib.parse import urlsplit

import pytest
from playwright.sync_api import Browser, BrowserContext, Page, sync_playwright

if TYPE_CHECKING:
    from pytest_django.live_server_helper import LiveServer

    from tests.register import Answered

# Playwright's synchronous interface runs an event loop in this thread, which Django otherwise takes for a mistake.
os.environ.setdefault("DJANGO_ALLOW_ASYNC_UNSAFE", "true")

FLAGS = (
    "--no-sandbox",
    "--disable-gpu",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
DESKTOP = {"width": 1180, "height": 900}
PHONE = {"width": 360, "height": 740}

Open = Callable[..., Page]


@pytest.fixture(scope="session")
def browser(chromium: str) -> Iterator[Browser]:
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=chromium, args=list(FLAGS))
        yield browser
        browser.close()


@pytest.fixture
def answered(live_server: LiveServer, monkeypatch: pytest.MonkeyPatch) -> Answered:
    """An invented base with one answered question; nothing is put on the queue."""
    from analysis import recompute
    from tests.register import a_base, a_question_with_an_answer

    monkeypatch.setattr(recompute, "ring", lambda request_id: True)
    return a_question_with_an_answer(a_base("harbour-districts", invented=True))


@pytest.fixture
def open_page(browser: Browser, live_server: LiveServer) -> Iterator[Open]:
    """A new browser profile: open_page(viewport=PHONE). The test fails if any page it opened complained."""
    contexts: list[BrowserContext] = []
    complaints: list[str] = []

    def complain(kind: str, text: str) -> None:
        complaints.append(f"{kind}: {text}")

    def check_host(url: str) -> None:
        parts = urlsplit(url)
        if parts.scheme not in ("data", "blob") and parts.netloc != urlsplit(live_server.url).netloc:
            complain("request elsewhere", url)

    def open_one(**options: object) -> Page:
        context = browser.new_context(base_url=live_server.url, **{"viewport": DESKTOP, **options})
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda message: complain(f"console {message.type}", message.text))
        page.on("pageerror", lambda error: complain("script error", str(error)))
        page.on("request", lambda request: check_host(request.url))
        return page

    yield open_one
    for context in contexts:
        context.close()
    assert complaints == []


@pytest.fixture
def signed_in(open_page: Open, answered: Answered) -> Open:
    """As `open_page`, with the steward of the answered base signed in."""
    from tests.register import PASSWORD

    def open_one(**options: object) -> Page:
        page = open_page(**options)
        page.goto("/sign-in/")
        page.get_by_label("E-mail").fill(answered.access.actor.person.email)
        page.get_by_label("Password").fill(PASSWORD)
        page.get_by_role("button", name="Sign in").click()
        page.wait_for_url("**/")
        return page

    return open_one
