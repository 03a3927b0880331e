"""Who may do what, as questions about a person's roles."""

from __future__ import annotations

from collections.abc import Callable
from functools import wraps

from django.http import HttpRequest, HttpResponse

from labsite.errors import NotAllowed, NotVisible

from .models import Role, User


def require(user: User, *roles: str) -> None:
    """Raise NotAllowed unless `user` is active and holds one of `roles` (any role at all, if none is named)."""
    wanted = roles or Role.values
    if user.is_active and user.has_role(*wanted):
        return
    names = " or ".join(Role(role).label.lower() for role in roles) or "any"
    raise NotAllowed(
        "accounts.role_missing",
        f"This needs the role of {names}." if roles else "This needs a role in the laboratory.",
        remedy="Ask the lab administrator if you should have it.",
        roles=[str(role) for role in wanted],
    )


def page_for(*roles: str) -> Callable:
    """Decorate a view: 404 for a person without any role here, 403 for one whose roles are not among `roles`."""

    def decorate(view: Callable[..., HttpResponse]) -> Callable[..., HttpResponse]:
        @wraps(view)
        def guarded(request: HttpRequest, *args: object, **kwargs: object) -> HttpResponse:
            if not request.user.roles:
                raise NotVisible("page.not_found", "There is no such page.")
            require(request.user, *roles)
            return view(request, *args, **kwargs)

        guarded.page_roles = frozenset(str(role) for role in roles or Role.values)
        return guarded

    return decorate
