"""What a page may load, and how a view asks for more."""

from __future__ import annotations

from collections.abc import Callable
from functools import wraps

from django.http import HttpRequest, HttpResponse

PLAIN = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data:; connect-src 'self';"
    " font-src 'self'; form-action 'self'; frame-ancestors 'none'; base-uri 'none'"
)
# The plotting library positions its elements through inline styles; without them a plot grows without bound.
WITH_PLOT = PLAIN.replace("style-src 'self'", "style-src 'self' 'unsafe-inline'")


def plot_page(view: Callable[..., HttpResponse]) -> Callable[..., HttpResponse]:
    """Mark a view whose page holds a plot."""

    @wraps(view)
    def marked(request: HttpRequest, *args: object, **kwargs: object) -> HttpResponse:
        response = view(request, *args, **kwargs)
        response.holds_plot = True
        return response

    return marked
