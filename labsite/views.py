"""Pages that belong to no part: the way in, the health check, and what is shown when something is wrong."""

from __future__ import annotations

import errno
import sys

from django.conf import settings
from django.contrib.auth.decorators import login_not_required
from django.core.exceptions import RequestDataTooBig, TooManyFieldsSent, TooManyFilesSent
from django.db import connection
from django.http import HttpRequest, HttpResponse, JsonResponse
from django.http.multipartparser import MultiPartParserError
from django.shortcuts import redirect
from django.template import loader
from django.views.decorators.http import require_safe

from .answers import refusal, wants_json
from .errors import BadInput, NotAllowed, NotVisible

DISK_FULL = 507  # Insufficient Storage, RFC 4918 section 11.5
CAUSES_FOLLOWED = 10


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


def not_understood(request: HttpRequest, exception: Exception) -> HttpResponse:
    """What was sent broke a rule of the transport itself, before any form was looked at."""
    remedy = "Go back, load the page again, and send it once more."
    if isinstance(exception, TooManyFilesSent):
        message = f"Too many files were sent: {settings.UPLOAD_MAX_FILES} are accepted at once."
        remedy = "Send them in several uploads."
    elif isinstance(exception, TooManyFieldsSent):
        message = f"Too many fields were sent: {settings.DATA_UPLOAD_MAX_NUMBER_FIELDS} are accepted at once."
    elif isinstance(exception, RequestDataTooBig):
        limit = settings.DATA_UPLOAD_MAX_MEMORY_SIZE // 2**20
        message, remedy = f"The text that was sent is too long: {limit} MiB are accepted.", "Shorten it."
    elif isinstance(exception, MultiPartParserError):
        message = "The form that was sent cannot be read."
        remedy = "Give the files shorter names, then send them once more."
    else:
        message = "The request could not be understood."
    return refusal(request, BadInput("request.not_understood", message, remedy=remedy), status=400)


def not_found(request: HttpRequest, exception: Exception) -> HttpResponse:
    return refusal(request, NotVisible("page.not_found", "There is no such page."))


def not_allowed(request: HttpRequest, exception: Exception) -> HttpResponse:
    return refusal(request, NotAllowed("page.not_allowed", "You may not open this page."))


def server_error(request: HttpRequest) -> HttpResponse:
    """Something failed here. The page touches neither the database nor the session: they may be what failed."""
    code, status = "server.error", 500
    message = "Something failed on the server. Nothing was written."
    remedy = "Tell the lab administrator."
    if is_full(sys.exception()):  # Django calls this while it handles the exception
        code, status = "server.disk_full", DISK_FULL
        message = "The server's disk is full. Nothing was written."
        remedy = "Tell the lab administrator, who has to make room; then do it once more."
    error = {"code": code, "message": message, "remedy": remedy, "request": getattr(request, "request_id", "")}
    if wants_json(request):
        return JsonResponse({"error": error | {"params": {}}}, status=status)
    return HttpResponse(loader.render_to_string("error.html", {"error": error, "status": status}), status=status)


def is_full(problem: BaseException | None) -> bool:
    """Whether `problem`, or what led to it, is a full disk: of the files, of SQLite, or of a PostgreSQL server."""
    seen = 0
    while problem is not None and seen < CAUSES_FOLLOWED:
        if isinstance(problem, OSError) and problem.errno in (errno.ENOSPC, errno.EDQUOT):
            return True
        if getattr(problem, "sqlite_errorname", "") == "SQLITE_FULL" or getattr(problem, "sqlstate", "") == "53100":
            return True
        problem, seen = problem.__cause__ or problem.__context__, seen + 1
    return False
