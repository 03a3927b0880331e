"""What is known about the request that is being served; the middleware sets it, the trail's writer reads it."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from typing import NamedTuple


class Origin(NamedTuple):
    """Where a change comes from: the id of the request, and the client's address ("" outside a request)."""

    request_id: str = ""
    address: str = ""


_OUTSIDE = Origin()
_origin: ContextVar[Origin] = ContextVar("bandledger_origin", default=_OUTSIDE)


def current() -> Origin:
    return _origin.get()


@contextmanager
def serving(request_id: str, address: str) -> Iterator[None]:
    """While inside, `current()` answers with this request."""
    token = _origin.set(Origin(request_id, address))
    try:
        yield
    finally:
        _origin.reset(token)
