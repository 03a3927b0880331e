"""What happens around every request."""

from __future__ import annotations

import secrets
from collections.abc import Callable, Iterable, Iterator

from axes.helpers import get_client_ip_address
from django.conf import settings
from django.http import HttpRequest, HttpResponse

from . import policy
from .answers import refusal
from .errors import BadInput, DomainError
from .trail import canonical, context

GetResponse = Callable[[HttpRequest], HttpResponse]
BYTES_WITHOUT_SESSION = 1024 * 1024
TOO_LARGE = 413


class RequestId:
    """Gives each request an id, for the log, the answer and the trail, and tells the trail the client's address."""

    def __init__(self, get_response: GetResponse):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        request.request_id = secrets.token_hex(8)
        with context.serving(request.request_id, get_client_ip_address(request) or ""):
            response = self.get_response(request)
        response["X-Request-Id"] = request.request_id
        return response


class ContentPolicy:
    """The content security policy, and no copy of a page with records in a shared computer's cache."""

    def __init__(self, get_response: GetResponse):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        response = self.get_response(request)
        holds_plot = getattr(response, "holds_plot", False)
        response["Content-Security-Policy"] = policy.WITH_PLOT if holds_plot else policy.PLAIN
        response["Permissions-Policy"] = "camera=(), geolocation=(), microphone=()"
        if not response.has_header("Cache-Control"):
            response["Cache-Control"] = "private, no-store"
        return response


class UploadGate:
    """Refuses a body by its declared length, before the forgery check reads it into memory or on to the disk."""

    def __init__(self, get_response: GetResponse):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        if request.method in ("GET", "HEAD", "OPTIONS"):
            return self.get_response(request)
        signed_in_perhaps = settings.SESSION_COOKIE_NAME in request.COOKIES
        limit = settings.UPLOAD_MAX_BYTES if signed_in_perhaps else BYTES_WITHOUT_SESSION
        try:
            length = int(request.META.get("CONTENT_LENGTH") or 0)
        except ValueError:
            length = -1
        if length < 0 or (not length and request.META.get("HTTP_TRANSFER_ENCODING")):
            return refusal(request, BadInput("upload.length_unknown", "The length of what was sent is not known."))
        if length > limit:
            error = BadInput(
                "upload.too_large",
                f"This is too large: {length / 2**20:.0f} MiB were sent, {limit / 2**20:.0f} MiB are accepted at once.",
                remedy="Send fewer files at a time, or export only the spectrum.",
                limit_bytes=limit,
            )
            return refusal(request, error, status=TOO_LARGE)
        return self.get_response(request)


class StorableText:
    """Refuses text that no database of ours can hold: NUL, and halves of a surrogate pair.

    What comes with every request is looked at before the session is read; the form only after the forgery check has
    had its turn, because reading it takes the whole body in.
    """

    def __init__(self, get_response: GetResponse):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        if not canonical.storable(request.path_info, *_texts(request.GET.lists()), *_texts(request.COOKIES.items())):
            return self._refuse(request)
        return self.get_response(request)

    def process_view(
        self, request: HttpRequest, view: Callable, view_args: tuple, view_kwargs: dict
    ) -> HttpResponse | None:
        if request.method == "POST" and not canonical.storable(*_texts(request.POST.lists())):
            return self._refuse(request)
        return None

    def _refuse(self, request: HttpRequest) -> HttpResponse:
        error = BadInput(
            "request.control_character",
            "A character that cannot be stored was sent.",
            remedy="Go back and type the text anew instead of pasting it.",
        )
        return refusal(request, error)


def _texts(pairs: Iterable[tuple[str, str | list[str]]]) -> Iterator[str]:
    for name, value in pairs:
        yield name
        yield from [value] if isinstance(value, str) else value


class DomainErrors:
    """Turns a refusal raised by a service or a selector into its answer."""

    def __init__(self, get_response: GetResponse):
        self.get_response = get_response

    def __call__(self, request: HttpRequest) -> HttpResponse:
        return self.get_response(request)

    def process_exception(self, request: HttpRequest, exception: Exception) -> HttpResponse | None:
        return refusal(request, exception) if isinstance(exception, DomainError) else None
