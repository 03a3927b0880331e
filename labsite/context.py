"""What every template knows: the laboratory, the time, and where this person can go."""

from __future__ import annotations

from dataclasses import dataclass

from django.conf import settings
from django.http import HttpRequest
from django.urls import reverse
from django.utils import timezone


@dataclass(frozen=True)
class Place:
    """An item of the navigation, shown to people who hold one of `roles` (all people with a role, if empty)."""

    label: str
    url_name: str
    roles: frozenset[str]
    order: int


_places: dict[str, Place] = {}


def register_place(label: str, url_name: str, *, roles: tuple[str, ...] = (), order: int) -> None:
    """Put a page into the navigation; apps call it when they are ready. Lower `order` stands further left."""
    _places[url_name] = Place(label, url_name, frozenset(str(role) for role in roles), order)


def laboratory(request: HttpRequest) -> dict[str, object]:
    return {
        "laboratory_name": settings.LABORATORY_NAME,
        "demo": settings.DEMO,
        "nav_items": _nav_items(request),
        "server_time": timezone.now(),
    }


def _nav_items(request: HttpRequest) -> list[dict[str, object]]:
    user = getattr(request, "user", None)
    if user is None or not user.is_authenticated or user.must_change_password:
        return []
    items = []
    for place in sorted(_places.values(), key=lambda place: place.order):
        if user.roles & place.roles if place.roles else user.roles:
            url = reverse(place.url_name)
            items.append({"label": place.label, "url": url, "current": request.path.startswith(url)})
    return items
