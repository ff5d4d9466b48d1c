"""Every code a problem can carry, what it means, and what to do: the contract clients may branch on.

A code is the last part of a problem's ``type`` (``/problems/<code>``), where this text is served, or the ``code`` of
one of its ``errors``. Codes are never reused for something else; sentences may improve. The reasons why a reading is
refused come with their explanations from ``evidence.readings``.
"""

from dataclasses import dataclass
from functools import cache

from evidence.readings import ErrorCode


@dataclass(frozen=True)
class Code:
    """A stable code, its title, and what to do about it."""

    name: str
    title: str
    remedy: str = ""


_CODES = (
    # The request itself.
    Code("bad-request", "The request could not be understood", "Check the address, the headers and the host name."),
    Code("malformed-json", "The body is not valid JSON", "Check commas, quotes and brackets; the body must be UTF-8."),
    Code(
        "json-out-of-bounds",
        "The JSON goes beyond what is accepted",
        "Names stand once in an object, numbers are finite, whole numbers lie within ±(2^53 − 1), nesting is at most 32"
        " deep, and no text holds NUL or half a surrogate pair.",
    ),
    Code("body-not-an-object", "The body must be one JSON object", "Send an object with named fields: {…}."),
    Code(
        "length-required",
        "The length of the body must be stated",
        "Send a Content-Length header instead of a chunked body.",
    ),
    Code("body-too-large", "The body is larger than is accepted", "Send fewer estimates in one request."),
    Code("unsupported-media-type", "The body must be JSON", "Send Content-Type: application/json."),
    Code("not-acceptable", "No form that you accept is available", "Accept application/json."),
    Code(
        "method-not-allowed",
        "This address does not answer to that method",
        "The Allow header lists the methods that it answers to.",
    ),
    Code("not-found", "There is nothing at this address", "Check the address against the schema at /api/v1/schema/."),
    Code(
        "server-error",
        "Something went wrong on our side",
        "Nothing was half-written. Try again; the cause has been logged.",
    ),
    Code(
        "unknown-parameter",
        "The address carries a parameter that is not known here",
        "Check its spelling against the schema.",
    ),
    Code("parameter-repeated", "A parameter is given more than once", "Give it once."),
    Code(
        "not-a-cursor",
        "The cursor did not come from a page of this list",
        "Follow the next link of a page as it stands.",
    ),
    Code("not-a-limit", "limit is a whole number from 1 to 500", "Leave it out for 50."),
    Code(
        "not-an-entity-tag",
        "If-Match takes one strong entity tag, as the ETag header gave it",
        "Send it back unchanged, in its quotes.",
    ),
    # Who asks.
    Code(
        "not-signed-in",
        "Sign-in is needed",
        "Send an Authorization header: Token <token>. Tokens come from /api/v1/sign-in/ and an evidence base's tokens.",
    ),
    Code(
        "sign-in-failed",
        "E-mail and password do not match",
        "Try again, or ask an administrator to reset the password.",
    ),
    Code("token-not-valid", "The token is not valid here", "It may have expired or been revoked: issue another."),
    Code("too-many-tries", "Too many failed sign-ins", "Wait for the time the Retry-After header gives."),
    Code("throttled", "Too many requests", "Wait for the time the Retry-After header gives."),
    Code(
        "csrf-failed",
        "The request lacks its security token",
        "Scripts of our own pages send X-CSRFToken; programs use a token.",
    ),
    Code("not-allowed", "Your role or token does not allow this", "Ask a steward of the evidence base."),
    Code("role-missing", "Your role does not allow this", "Ask a steward of the evidence base for another role."),
    Code("scope-missing", "The token's scopes do not allow this", "Issue a token with the scope that is named."),
    Code(
        "not-here",
        "There is no such thing here",
        "It does not exist, lies in an evidence base that you do not belong to, or did not exist at that moment.",
    ),
    # Whether the register agrees.
    Code("conflict", "The register has moved on", "Read again, then decide."),
    Code(
        "changed-meanwhile",
        "It was changed since it was read",
        "Read it again, look at the change, and send the new ETag.",
    ),
    Code("slug-taken", "The slug is in use already", "Choose another."),
    Code("standing-already", "The paper has this standing already"),
    Code("decided-already", "The estimate is decided in this way already"),
    Code("last-steward", "An evidence base needs at least one steward", "Name another steward first."),
    Code("nothing-to-retry", "Only a request that failed can be run again"),
    Code("claim-lost", "Another worker took this over"),
    Code("evidence-error", "The register refused this"),
    # Moments.
    Code(
        "not-a-moment",
        "as_of is neither a change number nor a day nor a time with its zone",
        "As in 812, 2026-11-12 or 2026-11-12T09:31:07Z.",
    ),
    Code("change-not-yet", "This change has not happened yet"),
    Code("time-in-the-future", "The time lies in the future"),
    Code(
        "no-history",
        "What is asked for has no past to read",
        "Members, tokens and requests are shown as they are now; leave as_of out.",
    ),
    Code("time-is-the-registers", "The register sets recorded times itself"),
    Code("time-runs-backwards", "A replayed change must follow the newest one"),
    # What was sent.
    Code("invalid", "Some of what was sent cannot be accepted", "Each of the errors says where and why."),
    Code("missing", "Something that is needed is missing"),
    Code("null-not-allowed", "The field cannot be null", "Leave it out instead."),
    Code("unknown-field", "There is no such field", "Check its spelling against the schema."),
    Code("not-text", "The value must be text"),
    Code("not-yes-or-no", "The value must be true or false"),
    Code("not-an-object", "The value must be an object"),
    Code("not-a-list", "The value must be a list"),
    Code("not-an-identifier", "The value must be an identifier as the service gave it"),
    Code("too-long", "The value is too long"),
    Code("too-many", "There are too many of them"),
    Code("unknown-choice", "The value is not one of the allowed words"),
    Code("not-acceptable-value", "The value cannot be accepted"),
    Code("not-acceptable-text", "The text holds characters that cannot be kept"),
    Code("repeated", "The value is given more than once"),
    Code("one-or-the-other", "Give one of the two, not both"),
    Code("nothing-changed", "Nothing would change", "The register says this already."),
    Code("nothing-given", "Nothing to change was given"),
    Code("not-a-slug", "A slug is made of a–z, 0–9 and single hyphens between them"),
    Code("not-a-code", "A code is made of a–z, 0–9 and single hyphens between them"),
    Code("not-a-name", "A name is made of a–z, 0–9 and single hyphens between them"),
    Code("not-plain", "A characteristic is a text, a number, or true or false"),
    Code("not-a-number", "The value is not a number"),
    Code("not-positive", "The value must lie above zero"),
    Code("not-a-date", "The value is not a date"),
    Code("not-a-time", "The value is not a time with its zone", "As in 2026-11-12T09:31:07Z."),
    Code("not-a-period", "A period is a year or an interval, as in 2015/2019"),
    Code("in-the-future", "The day has not come yet"),
    Code("already-expired", "The token would have expired already"),
    Code("no-scope", "A token needs at least one scope"),
    Code("unknown-scope", "There is no such scope"),
    Code("scope-beyond-role", "The scope goes beyond your role"),
    Code("password-too-weak", "The password is too easily guessed"),
    Code("unknown-role", "There is no such role"),
    Code("unknown-person", "Nobody here signs in with this e-mail"),
    Code("unknown-kind", "The kind is not a known one"),
    Code("unknown-metric", "There is no such metric"),
    Code("unknown-direction", "Which is better is either higher or lower"),
    Code("unknown-standing", "There is no such standing"),
    Code("unknown-decision", "A decision is in or out"),
    Code("unknown-question", "There is no such question here"),
    Code("unknown-estimate", "There is no such estimate here"),
    Code("unknown-study", "There is no such study here"),
    # Plans.
    Code("contradiction", "Two parts of the plan contradict each other"),
    Code("not-a-level", "A level lies between 0.5 and 0.999"),
    Code("not-an-amount", "An amount lies above 0 and at most at 1"),
    Code("not-an-evaluation", "The evaluation point is not described as it should be"),
    Code("not-a-point", "The evaluation point names no value"),
)


@cache
def all_codes() -> dict[str, Code]:
    """Every code by its name, those of readings included."""
    codes = {str(code): Code(str(code), code.explanation) for code in ErrorCode}
    # Where the service and the readings share a word they mean the same, and ours says what to do.
    return dict(sorted((codes | {code.name: code for code in _CODES}).items()))


def title_of(name: str, otherwise: str) -> str:
    """The title of a code; ``otherwise`` for a code that is not listed."""
    code = all_codes().get(name)
    return code.title.rstrip(".") if code is not None else otherwise
