"""The pages in Chromium: quiet console, keyboard, phone, print, and numbers equal to the API's.

What a page must hold to be used without a mouse or without sight follows WCAG 2.2 (2.1.1 keyboard, 2.4.1 skip link,
2.4.7 focus visible, 1.4.10 reflow at 320 units, 1.3.1 and 3.3.2 labels, 1.1.1 text alternatives).
"""

import json
import re
from itertools import pairwise

import pytest
from django.utils import timezone
from playwright.sync_api import Page, expect

from analysis.models import RecomputeRequest
from analysis.recompute import run
from evidence.models import EvidenceBase
from evidence.operations.tokens import issue_token
from tests.browser.conftest import DESKTOP, PHONE
from tests.register import PASSWORD, a_paper, an_estimate, ready_made

pytestmark = [pytest.mark.browser, pytest.mark.django_db(transaction=True)]

BASE = "/evidence-bases/harbour-districts/"


def _pages(answered) -> list[str]:
    question = f"{BASE}questions/messages/"
    newest = EvidenceBase.objects.get(pk=answered.evidence_base.pk).last_change
    return [
        "/",
        BASE,
        question,
        f"{question}?as_of={newest - 1}",
        f"{question}forest/",
        f"{question}protocols/1/",
        f"{BASE}papers/",
        f"{BASE}papers/{answered.papers[0].paper.paper_id}/",
        f"{BASE}changes/",
        f"{BASE}work/",
    ]


def _go(page: Page, address: str) -> None:
    response = page.goto(address)
    assert response is not None
    assert response.status == 200, address


@pytest.mark.parametrize(
    "viewport", [DESKTOP, PHONE, {"width": 320, "height": 640}], ids=["desktop", "phone", "reflow"]
)
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_no_page_complains_or_scrolls_sideways(answered, signed_in, viewport, scheme):
    page = signed_in(viewport=viewport, color_scheme=scheme)
    for address in _pages(answered):
        _go(page, address)
        too_wide = page.evaluate("document.documentElement.scrollWidth - document.documentElement.clientWidth")
        assert too_wide == 0, address


def test_the_right_layout_of_a_figure_is_shown(answered, signed_in):
    for viewport, shown, hidden in ((DESKTOP, "wide", "narrow"), (PHONE, "narrow", "wide")):
        page = signed_in(viewport=viewport)
        _go(page, f"{BASE}questions/messages/")
        for figure in ("trail", "forest"):
            expect(page.locator(f"svg.{figure}.{shown}")).to_be_visible()
            expect(page.locator(f"svg.{figure}.{hidden}")).to_be_hidden()


def test_text_in_figures_is_readable_on_a_phone(answered, signed_in):
    page = signed_in(viewport=PHONE)
    _go(page, f"{BASE}questions/messages/")
    smallest = page.evaluate(
        """() => Math.min(...[...document.querySelectorAll("svg.narrow text")].map(text =>
            parseFloat(getComputedStyle(text).fontSize) * text.getScreenCTM().a))"""
    )
    assert smallest >= 10  # common practice, no source


def test_the_service_is_used_by_keyboard_alone(answered, open_page):
    page = open_page()
    page.goto("/sign-in/")
    expect(page.get_by_label("E-mail")).to_be_focused()
    page.keyboard.type(answered.access.actor.person.email)
    page.keyboard.press("Tab")
    page.keyboard.type(PASSWORD)
    page.keyboard.press("Enter")
    page.wait_for_url("**/")
    _tab_to(page, "link", answered.evidence_base.name)
    page.keyboard.press("Enter")
    page.wait_for_url(f"**{BASE}")
    _tab_to(page, "link", "Do price messages raise farm-gate revenue?")
    page.keyboard.press("Enter")
    page.wait_for_url("**/questions/messages/")
    answer = page.locator("#answer").inner_text()

    summary = page.locator("details.moment summary")
    _tab_until(page, lambda: summary.evaluate("node => node === document.activeElement"))
    page.keyboard.press("Enter")
    expect(page.get_by_label("At the end of a day")).to_be_visible()
    page.keyboard.press("Escape")
    expect(page.get_by_label("At the end of a day")).to_be_hidden()
    expect(summary).to_be_focused()
    page.keyboard.press("Enter")
    change = page.get_by_label("After a change")
    _tab_until(page, lambda: change.evaluate("node => node === document.activeElement"))
    newest = int(change.input_value())
    page.keyboard.press("Control+A")
    page.keyboard.type(str(newest - 1))
    page.keyboard.press("Enter")
    page.wait_for_url(f"**/questions/messages/?as_of={newest - 1}")
    expect(page.get_by_role("note")).to_contain_text(f"as it stood after change {newest - 1}")
    assert page.locator("#answer").inner_text() != answer
    _tab_to(page, "link", "See it as it stands now")
    page.keyboard.press("Enter")
    page.wait_for_url("**/questions/messages/")
    assert page.locator("#answer").inner_text() == answer


def _tab_until(page: Page, reached) -> None:
    for _ in range(80):
        page.keyboard.press("Tab")
        if reached():
            # WCAG 2.4.7: wherever the focus is, it can be seen.
            assert page.evaluate("getComputedStyle(document.activeElement).outlineStyle") != "none"
            return
    raise AssertionError("the keyboard does not get there")


def _tab_to(page: Page, role: str, name: str) -> None:
    target = page.get_by_role(role, name=name, exact=True).first
    _tab_until(page, lambda: target.evaluate("node => node === document.activeElement"))


def test_the_first_stop_of_the_keyboard_skips_to_the_text(answered, signed_in):
    page = signed_in()
    _go(page, BASE)
    page.keyboard.press("Tab")
    expect(page.get_by_role("link", name="Skip to the text")).to_be_focused()
    expect(page.get_by_role("link", name="Skip to the text")).to_be_in_viewport()
    page.keyboard.press("Enter")
    assert page.url.endswith("#content")


def test_every_page_has_one_heading_of_first_rank_named_figures_and_labelled_fields(answered, signed_in):
    page = signed_in()
    for address in _pages(answered):
        _go(page, address)
        found = page.evaluate(
            """() => ({
                first: document.querySelectorAll("h1").length,
                main: document.querySelectorAll("main").length,
                lang: document.documentElement.lang,
                ranks: [...document.querySelectorAll("h1, h2, h3")].map(node => Number(node.tagName[1])),
                unnamed: [...document.querySelectorAll("svg.figure")].filter(node =>
                    !(node.getAttribute("aria-labelledby") || "").split(" ").every(id =>
                        (document.getElementById(id) || {}).textContent)).length,
                unlabelled: [...document.querySelectorAll("input:not([type=hidden])")].filter(node =>
                    !node.labels.length).length,
                headless: [...document.querySelectorAll("table")].filter(node =>
                    !node.querySelector("th[scope=col]")).length,
                nameless: [...document.querySelectorAll("a, button")].filter(node =>
                    !node.textContent.trim() && !node.hasAttribute("aria-hidden")).length,
            })"""
        )
        assert (found["first"], found["main"], found["lang"]) == (1, 1, "en"), address
        assert found["unnamed"] == found["unlabelled"] == found["headless"] == found["nameless"] == 0, address
        ranks = [1, *found["ranks"]]
        assert all(later <= earlier + 1 for earlier, later in pairwise(ranks)), address


def test_words_stand_out_from_their_ground_in_both_schemes(answered, signed_in):
    """WCAG 2.2, 1.4.3: a contrast of at least 4.5 for text. The formula is that of WCAG's relative luminance."""
    for scheme in ("light", "dark"):
        page = signed_in(color_scheme=scheme)
        _go(page, f"{BASE}questions/messages/")
        colours = page.evaluate(
            """() => {
                const style = getComputedStyle(document.documentElement);
                return Object.fromEntries(["ground", "sheet", "ink", "mute", "estimate", "change"].map(name =>
                    [name, style.getPropertyValue("--" + name).trim()]));
            }"""
        )
        for ground in ("ground", "sheet"):
            for text in ("ink", "mute", "estimate", "change"):
                assert _contrast(colours[text], colours[ground]) >= 4.5, (scheme, text, ground)


def _contrast(one: str, other: str) -> float:
    lighter, darker = sorted((_luminance(one), _luminance(other)), reverse=True)
    return (lighter + 0.05) / (darker + 0.05)


def _luminance(colour: str) -> float:
    digits = colour.removeprefix("#")
    digits = "".join(digit * 2 for digit in digits) if len(digits) == 3 else digits
    channels = [int(digits[start : start + 2], 16) / 255 for start in (0, 2, 4)]
    red, green, blue = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def test_the_page_prints(answered, signed_in):
    page = signed_in()
    _go(page, f"{BASE}questions/messages/")
    pdf = page.pdf(format="A4")
    assert pdf.startswith(b"%PDF-")
    assert len(re.findall(rb"/Type\s*/Page\b", pdf)) >= 1
    page.emulate_media(media="print")
    for unprinted in ("details.moment", ".masthead nav", ".get"):
        expect(page.locator(unprinted).first).to_be_hidden()
    expect(page.locator("svg.trail.wide")).to_be_visible()
    expect(page.locator("#answer")).to_be_visible()
    assert page.evaluate("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"


def test_the_page_prints_the_wide_figures_from_a_phone_too(answered, signed_in):
    page = signed_in(viewport=PHONE)
    _go(page, f"{BASE}questions/messages/")
    page.emulate_media(media="print")
    expect(page.locator("svg.forest.wide")).to_be_visible()
    expect(page.locator("svg.forest.narrow")).to_be_hidden()


def test_colours_forced_by_the_reader_leave_every_figure_visible(answered, signed_in):
    page = signed_in(forced_colors="active")
    _go(page, f"{BASE}questions/messages/")
    fills = page.evaluate(
        """() => [".line", ".whisker", ".null"].map(name =>
            getComputedStyle(document.querySelector("svg.wide " + name)).stroke)"""
    )
    ground = page.evaluate("getComputedStyle(document.body).backgroundColor")
    assert all(fill not in ("none", ground) for fill in fills)


def test_the_numbers_on_the_page_are_the_api_s(answered, signed_in):
    token = issue_token(access=answered.access, name="reading", scopes=["read"]).text
    page = signed_in()
    _go(page, f"{BASE}questions/messages/")
    told = page.request.get(
        "/api/v1/evidence-bases/harbour-districts/questions/messages/answer/",
        headers={"Authorization": f"Token {token}"},
    )
    answer = json.loads(told.body())
    assert told.status == 200, answer
    assert page.locator("#answer").inner_text().replace("\n", " ") == answer["sentence"]
    counts = f"{answer['papers']}\N{NO-BREAK SPACE}papers, {answer['studies']}\N{NO-BREAK SPACE}studies"
    expect(page.locator("main .sub").first).to_contain_text(counts)
    for flag in answer["flags"]:
        expect(page.locator("aside")).to_contain_text(flag["detail"])
    end = page.locator("svg.trail.wide text.now").inner_html()
    assert f"{abs(answer['displayed']['value']):.0f}" in end.replace("−", "")


def test_pending_work_is_followed_until_the_new_answer_is_there(answered, signed_in):
    for request in RecomputeRequest.objects.filter(state="queued"):
        run(request.pk)
    a_paper(answered.access, an_estimate(ready_made("0.90", "0.03")), published_on="2022")
    page = signed_in()
    _go(page, f"{BASE}questions/messages/")
    before = page.locator("#answer").inner_text()
    expect(page.locator("[data-words]")).to_have_text("Waiting to be worked out again.")
    page.reload()
    expect(page.locator("[data-words]")).to_have_text("Waiting to be worked out again.")
    link = page.get_by_role("link", name="Show the new answer")
    expect(link).to_be_hidden()
    run(RecomputeRequest.objects.get(state="queued").pk)
    expect(link).to_be_visible(timeout=20_000)
    expect(page.locator("[data-words]")).to_contain_text("Worked out as of change")
    assert page.locator("#answer").inner_text() == before  # the page never changes under the reader
    link.click()
    expect(page.locator("[data-words]")).to_have_count(0)
    assert page.locator("#answer").inner_text() != before


def test_failed_work_is_run_again_with_one_press(answered, signed_in):
    RecomputeRequest.objects.filter(state="queued").update(
        state="failed", problem="The numbers would not settle.", finished_at=timezone.now()
    )
    page = signed_in()
    _go(page, f"{BASE}work/")
    page.get_by_role("button", name="Run again").click()
    expect(page.get_by_text("will be worked out again: request")).to_be_visible()
    assert RecomputeRequest.objects.filter(state="queued").count() == 1


def test_figures_are_downloaded_as_files_that_stand_alone(answered, signed_in):
    page = signed_in()
    _go(page, f"{BASE}questions/messages/")
    with page.expect_download() as waiting:
        page.get_by_role("link", name="Download as SVG").first.click()
    path = waiting.value.path()
    assert waiting.value.suggested_filename.endswith(".svg")
    text = path.read_text(encoding="utf-8")
    assert text.startswith("<?xml")
    assert "Invented data." in text


def test_a_day_can_be_chosen_and_a_wrong_one_is_explained_in_the_form(answered, signed_in):
    page = signed_in()
    _go(page, BASE)
    page.locator("details.moment summary").click()
    day = page.get_by_label("At the end of a day")
    assert day.get_attribute("max") == timezone.now().date().isoformat()
    day.fill(timezone.now().date().isoformat())
    page.get_by_role("button", name="Show").first.click()
    page.wait_for_url(f"**{BASE}?as_of=*")
    expect(page.locator("h1")).to_have_text(answered.evidence_base.name)
