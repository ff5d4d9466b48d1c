"""Who gets in, and what strangers meet. Signing in follows OWASP's advice on throttling and on open redirects."""

import pytest
from django.test import Client
from django.urls import reverse
from django.utils import timezone

from analysis.models import RecomputeRequest
from dashboard import urls
from evidence.models import SignInFailure
from evidence.operations.people import FAILURES_ALLOWED_PER_EMAIL
from evidence.vocabularies import Role
from tests.dashboard.pages import page, signed_in
from tests.register import PASSWORD, Answered, a_base, a_member, a_person, a_question

pytestmark = pytest.mark.django_db


def _addresses(answered: Answered, slug: str | None = None) -> dict[str, str]:
    """Every address inside an evidence base, with identifiers that exist in it."""
    known = {
        "slug": "messages",
        "number": 1,
        "paper": answered.papers[0].paper.paper_id,
        "request_id": RecomputeRequest.objects.get(question=answered.question).pk,
    }
    addresses = {}
    for pattern in urls.in_a_base:
        wanted = {name: known[name] for name in pattern.pattern.converters}
        base = slug or answered.evidence_base.slug
        addresses[pattern.name] = reverse(f"dashboard:{pattern.name}", kwargs={"base": base, **wanted})
    return addresses


POSTED = {"retry"}


def test_every_address_of_a_base_is_tried_below(answered):
    assert len(_addresses(answered)) == len(urls.in_a_base) >= 14


def test_a_member_of_the_lowest_role_reads_every_page(answered):
    reader = signed_in(a_member(answered.access, Role.READER).actor.person)
    for name, address in _addresses(answered).items():
        if name not in POSTED:
            assert reader.get(address).status_code == 200, name


def test_a_stranger_meets_the_same_404_as_for_a_base_that_does_not_exist(answered):
    stranger = signed_in(a_base().actor.person)
    nowhere = _addresses(answered, slug="no-such-base")
    for name, address in _addresses(answered).items():
        ask = stranger.post if name in POSTED else stranger.get
        theirs, missing = ask(address), ask(nowhere[name])
        assert (theirs.status_code, missing.status_code) == (404, 404), name
        slug = answered.evidence_base.slug
        assert page(theirs, 404).words.replace(slug, "no-such-base") == page(missing, 404).words, name


def test_things_of_another_base_do_not_exist_under_ones_own(answered):
    own = a_base()
    a_question(own)
    client = signed_in(own.actor.person)
    request_id = RecomputeRequest.objects.get(question=answered.question).pk
    for name, args in (("paper", [answered.papers[0].paper.paper_id]), ("request-state", [request_id])):
        address = reverse(f"dashboard:{name}", args=[own.evidence_base.slug, *args])
        assert client.get(address).status_code == 404
    retry = reverse("dashboard:retry", args=[own.evidence_base.slug, request_id])
    assert client.post(retry).status_code == 404


def test_whoever_has_not_signed_in_is_sent_to_sign_in_and_comes_back(answered):
    for name, address in _addresses(answered).items():
        if name in POSTED:
            continue
        response = Client().get(address)
        assert response.status_code == 302
        assert response.url.startswith("/sign-in/?next=")
    person = answered.access.actor.person
    client = Client()
    where = client.get(_addresses(answered)["question"] + "?as_of=3").url
    hidden = page(client.get(where)).one("input", name="next")
    response = client.post(
        "/sign-in/", {"email": person.email, "password": PASSWORD, "next": hidden.attributes["value"]}
    )
    assert response.url == _addresses(answered)["question"] + "?as_of=3"
    assert client.get(response.url).status_code == 200


def test_a_member_who_left_is_a_stranger(answered):
    member = a_member(answered.access, Role.READER)
    client = signed_in(member.actor.person)
    address = _addresses(answered)["base"]
    assert client.get(address).status_code == 200
    member.actor.person.memberships.all().delete()
    assert client.get(address).status_code == 404


def test_home_lists_only_ones_own_bases(answered):
    a_base("somebody-elses")
    words = page(signed_in(answered.access.actor.person).get("/")).words
    assert answered.evidence_base.name in words
    assert "Somebody-Elses" not in words


@pytest.mark.parametrize(
    "wanted", ["https://elsewhere.example/", "//elsewhere.example", "javascript:alert(1)", "\\\\x"]
)
def test_signing_in_never_leads_to_another_host(wanted):
    person = a_person()
    response = Client().post("/sign-in/", {"email": person.email, "password": PASSWORD, "next": wanted})
    assert (response.status_code, response.url) == (302, "/")


def test_a_wrong_password_says_so_and_keeps_the_email():
    person = a_person()
    response = Client().post("/sign-in/", {"email": person.email, "password": "wrong"})
    shown = page(response, 401)
    assert "E-mail and password do not match." in shown.one("div", role="alert").words
    assert shown.one("input", id="email").attributes["value"] == person.email
    assert "wrong" not in response.content.decode()


def test_an_unknown_email_meets_the_same_words():
    shown = page(Client().post("/sign-in/", {"email": "nobody@example.org", "password": "wrong"}), 401)
    assert "E-mail and password do not match." in shown.one("div", role="alert").words


def test_repeated_failures_are_refused_even_with_the_right_password():
    person = a_person()
    for _ in range(FAILURES_ALLOWED_PER_EMAIL):
        Client().post("/sign-in/", {"email": person.email, "password": "wrong"})
    client = Client()
    response = client.post("/sign-in/", {"email": person.email, "password": PASSWORD})
    assert "Too many sign-ins have failed." in page(response, 429).one("div", role="alert").words
    assert int(response["Retry-After"]) > 0
    assert "_auth_user_id" not in client.session
    SignInFailure.objects.update(failed_at=timezone.now() - timezone.timedelta(hours=1))
    assert client.post("/sign-in/", {"email": person.email, "password": PASSWORD}).status_code == 302


def test_text_the_database_cannot_hold_is_no_server_error(answered):
    assert Client().post("/sign-in/", {"email": "a\x00b", "password": "\x00"}).status_code == 401
    client = signed_in(answered.access.actor.person)
    assert client.get(_addresses(answered)["papers"], {"q": "\x00"}).status_code == 200
    assert client.get(_addresses(answered)["base"], {"as_of": "\x00"}).status_code == 400


def test_signing_in_starts_a_new_session():
    person = a_person()
    client = Client()
    client.get("/sign-in/")
    session = client.session
    session["kept"] = 1
    session.save()
    before = session.session_key
    client.post("/sign-in/", {"email": person.email, "password": PASSWORD})
    assert client.session.session_key != before


def test_signing_out_takes_a_post():
    client = signed_in(a_person())
    assert client.get("/sign-out/").status_code == 405
    assert "_auth_user_id" in client.session
    assert client.post("/sign-out/").url == "/sign-in/"
    assert "_auth_user_id" not in client.session


def test_forms_without_their_token_are_refused():
    person = a_person()
    client = Client(enforce_csrf_checks=True)
    shown = page(client.post("/sign-in/", {"email": person.email, "password": PASSWORD}), 403)
    assert "Reload the page" in shown.words


def test_pages_tell_shared_caches_to_keep_nothing(answered):
    client = signed_in(answered.access.actor.person)
    for name, address in _addresses(answered).items():
        if name not in POSTED:
            assert "private" in client.get(address)["Cache-Control"], name


def test_pages_answer_only_to_the_methods_they_have(answered):
    client = signed_in(answered.access.actor.person)
    for name, address in _addresses(answered).items():
        wrong = client.get if name in POSTED else client.post
        assert wrong(address).status_code == 405, name


def test_numbers_beyond_what_a_column_holds_are_not_found(answered):
    client = signed_in(answered.access.actor.person)
    slug = answered.evidence_base.slug
    huge = "9" * 30
    for address in (f"work/{huge}/", f"questions/messages/protocols/{huge}/"):
        assert client.get(f"/evidence-bases/{slug}/{address}").status_code == 404
    assert client.get(f"/evidence-bases/{slug}/", {"as_of": huge}).status_code == 400
    assert client.get(f"/evidence-bases/{slug}/changes/", {"page": huge}).status_code == 200
