"""Pages that belong to no part: the way in, the health check, and what is shown when something is wrong."""

from __future__ import annotations

from django.conf import settings
from django.contrib.auth.decorators import login_not_required
from django.db import connection
from django.http import HttpRequest, HttpResponse, JsonResponse
from django.shortcuts import redirect
from django.template import loader
from django.views.decorators.http import require_safe

from .answers import refusal, wants_json
from .errors import NotAllowed, NotVisible


@require_safe
def home(request: HttpRequest) -> HttpResponse:
    """Where everybody starts; a person without a role yet finds on their account's page what to do."""
    return redirect(settings.LOGIN_REDIRECT_URL if request.user.roles else "accounts:profile")


@login_not_required
@require_safe
def health(request: HttpRequest) -> HttpResponse:
    """Whether the server can answer and read its database; says nothing about the laboratory."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT 1")
    return JsonResponse({"status": "ok"})


def csrf_failure(request: HttpRequest, reason: str = "") -> HttpResponse:
    return refusal(
        request,
        NotAllowed(
            "page.form_expired",
            "This form was opened in another session.",
            remedy="Go back, load the page again, and send the form once more.",
        ),
    )


def not_found(request: HttpRequest, exception: Exception) -> HttpResponse:
    return refusal(request, NotVisible("page.not_found", "There is no such page."))


def not_allowed(request: HttpRequest, exception: Exception) -> HttpResponse:
    return refusal(request, NotAllowed("page.not_allowed", "You may not open this page."))


def server_error(request: HttpRequest) -> HttpResponse:
    """Something failed here. The page touches neither the database nor the session: they may be what failed."""
    request_id = getattr(request, "request_id", "")
    message = "Something failed on the server. Nothing was written."
    error = {"code": "server.error", "message": message, "remedy": "Tell the lab administrator.", "request": request_id}
    if wants_json(request):
        return JsonResponse({"error": error | {"params": {}}}, status=500)
    return HttpResponse(loader.render_to_string("error.html", {"error": error, "status": 500}), status=500)
