"""The refusals of the whole application: a stable code for programs, parameters, and a sentence for people.

A leaf module: it imports nothing of ours. `status` is the HTTP status that the middleware answers with.
"""

from __future__ import annotations


class DomainError(Exception):
    """Something that was asked for is refused. Nothing was written."""

    status = 400

    def __init__(self, code: str, message: str, *, remedy: str = "", **params: object):
        super().__init__(message)
        self.code = code
        self.message = message
        self.remedy = remedy
        self.params = params


class NotVisible(DomainError):
    """The thing does not exist for this person."""

    status = 404


class NotAllowed(DomainError):
    """The thing exists, but this person may not do that to it, now or later."""

    status = 403


class NotPossible(DomainError):
    """Allowed in principle, but not in the state the record is in."""

    status = 409


class Stale(NotPossible):
    """The record changed since the page was shown; what was typed is kept on the page that says so."""


class BadInput(DomainError):
    """What was sent cannot be accepted; `field` in the parameters names the place."""

    status = 422
