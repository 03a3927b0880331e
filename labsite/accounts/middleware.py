"""Sessions end, and nothing is shown to somebody who is not signed in."""

from __future__ import annotations

from collections.abc import Callable
from urllib.parse import urlencode

from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect
from django.urls import reverse

from labsite.answers import refusal, wants_json
from labsite.errors import NotAllowed

from . import sessions

UNAUTHORIZED = 401
WITH_TEMPORARY_PASSWORD = {"accounts:change_password", "accounts:sign_out"}


class SessionLimits:
    """Ends a session that was idle for too long, is too old, or belongs to an account changed since."""

    def __init__(self, get_response: Callable[[HttpRequest], HttpResponse]):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        request.session_ended = ""
        if request.user.is_authenticated:
            why = sessions.why_over(request)
            if why:
                sessions.expire(request, why)
                request.session_ended = why
            elif request.method != "GET" or request.headers.get("HX-Request") != "true":
                # A page that asks for progress by itself is no sign of a person.
                sessions.seen(request)
        return self.get_response(request)


class SignInRequired:
    """Sends everybody to the sign-in page first, except from views marked with `login_not_required`."""

    def __init__(self, get_response: Callable[[HttpRequest], HttpResponse]):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        return self.get_response(request)

    def process_view(
        self, request: HttpRequest, view: Callable, view_args: tuple, view_kwargs: dict
    ) -> HttpResponse | None:
        if not getattr(view, "login_required", True):
            return None
        if not request.user.is_authenticated:
            return self._sign_in_first(request)
        if request.user.must_change_password and request.resolver_match.view_name not in WITH_TEMPORARY_PASSWORD:
            return self._go(request, reverse("accounts:change_password"))
        return None

    def _sign_in_first(self, request: HttpRequest) -> HttpResponse:
        if wants_json(request):
            error = NotAllowed("accounts.sign_in_required", "Sign in first.")
            return refusal(request, error, status=UNAUTHORIZED)
        facts = {}
        if request.method == "GET" and request.headers.get("HX-Request") != "true":
            facts["next"] = request.get_full_path()
        if request.session_ended:
            facts["ended"] = request.session_ended
        return self._go(request, reverse("accounts:sign_in") + (f"?{urlencode(facts)}" if facts else ""))

    def _go(self, request: HttpRequest, url: str) -> HttpResponse:
        if request.headers.get("HX-Request") == "true":
            return HttpResponse(status=204, headers={"HX-Redirect": url})
        return redirect(url)
