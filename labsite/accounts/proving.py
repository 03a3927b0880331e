"""Asking the signed-in person for their password again: throttled, never inside a transaction."""

from __future__ import annotations

from django.http import HttpRequest

from labsite.errors import BadInput, NotAllowed
from labsite.trail.events import Event
from labsite.trail.record import in_unit_of_work, record, unit_of_work

from . import lockout
from .services import account_subject


def prove_password(
    request: HttpRequest, password: str, *, event: Event, what: str, area: str = "accounts", field: str = "password"
) -> None:
    """Return if `password` is that of the signed-in person. Otherwise record `event` and raise.

    `what` says in the trail what the password was asked for. Failures count for `area`: those at the sign-in page,
    which anybody can cause, lock no signature, and wrong signatures lock no sign-in.
    Raises BadInput (`<area>.wrong_password`, naming `field`), or NotAllowed (`<area>.locked_out`) after too many.
    """
    if in_unit_of_work():
        raise RuntimeError("a password was to be checked while records are locked")
    person = request.user
    key = lockout.counted_as(person.username_key, area)
    if lockout.proves_itself(request, key, person.pk, password):
        lockout.forget_failures(request, key)
        return
    attempt = lockout.count_failure(request, key)
    if attempt.worth_recording:
        with unit_of_work():
            record(event, by=person, subject=account_subject(person), facts={"asked_for": what, **attempt.facts()})
    if attempt.locked:
        raise NotAllowed(
            f"{area}.locked_out",
            "Too many wrong passwords: this is locked for a while.",
            remedy=lockout.remedy(),
            field=field,
        )
    raise BadInput(
        f"{area}.wrong_password",
        "The password did not match.",
        field=field,
        remedy="Type the password that you sign in with.",
    )
