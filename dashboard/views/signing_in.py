"""Signing in and out. The register counts failures and refuses after too many; this page only says so."""

from django.conf import settings
from django.contrib.auth import login, logout
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render, resolve_url
from django.utils.http import url_has_allowed_host_and_scheme
from django.views.decorators.cache import never_cache
from django.views.decorators.debug import sensitive_post_parameters
from django.views.decorators.http import require_http_methods, require_POST

from evidence.errors import NotSignedIn, TooManyTries
from evidence.operations.people import sign_in as check_sign_in


@never_cache
@sensitive_post_parameters("password")
@require_http_methods(["GET", "HEAD", "POST"])
def sign_in(request: HttpRequest) -> HttpResponse:
    """The form, and what it sends. After signing in one comes to where one wanted to go, if that is on this host."""
    wanted = request.POST.get("next") or request.GET.get("next", "")
    if not url_has_allowed_host_and_scheme(wanted, {request.get_host()}, require_https=request.is_secure()):
        wanted = ""
    if request.method != "POST":
        if request.user.is_authenticated:
            return redirect(wanted or settings.LOGIN_REDIRECT_URL)
        return render(request, "dashboard/sign_in.html", {"next": wanted})
    email = _storable(request.POST.get("email", ""))
    try:
        person = check_sign_in(
            email=email,
            password=_storable(request.POST.get("password", "")),
            address=request.META.get("REMOTE_ADDR", ""),
        )
    except NotSignedIn as error:
        context = {"next": wanted, "email": email, "problem": error.detail}
        return render(request, "dashboard/sign_in.html", context, status=401)
    except TooManyTries as error:
        context = {"next": wanted, "email": email, "problem": error.detail}
        response = render(request, "dashboard/sign_in.html", context, status=429)
        response["Retry-After"] = str(error.retry_after_seconds)
        return response
    login(request, person, backend="django.contrib.auth.backends.ModelBackend")
    return redirect(wanted or settings.LOGIN_REDIRECT_URL)


def _storable(text: str) -> str:
    """Without NUL, which the database cannot compare with anything."""
    return text.replace("\x00", "")


@require_POST
def sign_out(request: HttpRequest) -> HttpResponse:
    """Ends the session. By POST only: a link or an image elsewhere must not sign anyone out."""
    logout(request)
    return redirect(resolve_url(settings.LOGOUT_REDIRECT_URL))
