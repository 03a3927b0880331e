"""How a refusal reaches the person or program that asked: one page, one fragment, or one JSON shape."""

from __future__ import annotations

from django.http import HttpRequest, HttpResponse, JsonResponse
from django.shortcuts import render
from django.utils.html import format_html

from .errors import DomainError


def wants_json(request: HttpRequest) -> bool:
    if request.path.startswith("/api/"):
        return True
    return request.get_preferred_type(["text/html", "application/json"]) == "application/json"


def refusal(request: HttpRequest, error: DomainError, *, status: int | None = None) -> HttpResponse:
    """The answer to a request that is refused with `error`."""
    status = status or error.status
    request_id = getattr(request, "request_id", "")
    if wants_json(request):
        body = {
            "code": error.code,
            "message": error.message,
            "remedy": error.remedy,
            "params": error.params,
            "request": request_id,
        }
        return JsonResponse({"error": body}, status=status, json_dumps_params={"default": str})
    if request.headers.get("HX-Request") == "true":
        fragment = format_html(
            '<div class="fragment notice notice-error" role="alert"><p><strong>{}</strong></p><p>{}</p></div>',
            error.message,
            error.remedy,
        )
        return HttpResponse(fragment, status=status)
    shown = {"code": error.code, "message": error.message, "remedy": error.remedy, "request": request_id}
    return render(request, "error.html", {"error": shown, "status": status}, status=status)
