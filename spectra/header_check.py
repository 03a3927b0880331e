"""What a file's header states, held against what a person states about the same measurement. Pure."""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import date
from typing import NamedTuple

from spectra.core import formats
from spectra.models import PhaseChoices

# What a measurement may be registered as, by the header's state: a film is of a liquid or a solid.
PHASES_THAT_AGREE = {
    PhaseChoices.GAS: (PhaseChoices.GAS,),
    PhaseChoices.LIQUID: (PhaseChoices.LIQUID, PhaseChoices.FILM),
    PhaseChoices.SOLID: (PhaseChoices.SOLID, PhaseChoices.FILM),
    PhaseChoices.FILM: (PhaseChoices.FILM, PhaseChoices.LIQUID, PhaseChoices.SOLID),
    PhaseChoices.SOLUTION: (PhaseChoices.SOLUTION,),
}
RESOLUTIONS_AGREE_WITHIN = (
    0.1  # as a fraction of the header's; common practice: instruments write 3.857 for a nominal 4
)
_DAY = re.compile(r"(\d{4})[-/.](\d{1,2})[-/.](\d{1,2})\b")


class Contradiction(NamedTuple):
    field: str
    text: str


def contradictions(headers: Mapping[str, str], told: Mapping[str, object], *, today: date) -> list[Contradiction]:
    """Where the header and `told` cannot both be right.

    told : phase, resolution_cm1, standard_received_on, standard_expires_on, each None or absent where nothing was said.
    What either side leaves open contradicts nothing, and neither does a date that is not plainly year, month, day.
    """
    stated = formats.stated(headers)
    found = [
        _phase(stated["phase"], told.get("phase")),
        _resolution(stated["resolution_cm1"], told.get("resolution_cm1")),
    ]
    if measured := _day(str(stated["measured_date"] or "")):
        found.append(_measured(measured, told, today))
    return [one for one in found if one is not None]


def _phase(stated: object, told: object) -> Contradiction | None:
    if not stated or not told or told in PHASES_THAT_AGREE.get(stated, (told,)):
        return None
    return Contradiction("phase", f"the file says that it was measured as {stated}, not as {told}")


def _resolution(stated: object, told: object) -> Contradiction | None:
    if not isinstance(stated, float) or not isinstance(told, int | float):
        return None
    if abs(stated - told) <= RESOLUTIONS_AGREE_WITHIN * stated:
        return None
    return Contradiction("resolution_cm1", f"the file says resolution {stated:g} cm⁻¹, not {told:g} cm⁻¹")


def _measured(measured: date, told: Mapping[str, object], today: date) -> Contradiction | None:
    received, expires = told.get("standard_received_on"), told.get("standard_expires_on")
    if isinstance(received, date) and measured < received:
        return Contradiction(
            "standard_received_on", f"the file says measured on {measured}, before the standard came on {received}"
        )
    if isinstance(expires, date) and measured > expires:
        return Contradiction(
            "standard_expires_on", f"the file says measured on {measured}, after the standard expired on {expires}"
        )
    if measured > today:
        return Contradiction("file", f"the file says measured on {measured}, which lies ahead")
    return None


def _day(text: str) -> date | None:
    match = _DAY.match(text.strip())
    if match is None:
        return None
    try:
        return date(*map(int, match.groups()))
    except ValueError:
        return None
