"""What a file's header plainly states about the measurement: phase, resolution, path and date. Never guessed.

Labels of JCAMP-DX 4.24 (McDonald and Wilks, Appl. Spectrosc. 42 (1988) 151): STATE, RESOLUTION, PATH LENGTH, DATE and
LONG DATE. Writers put remarks behind the state ("GAS (150 mmHg, N2 ADDED)"), which do not count.
"""

from __future__ import annotations

import re
from collections.abc import Mapping

from spectra.core.types import Phase

FINEST_RESOLUTION_CM1, COARSEST_RESOLUTION_CM1 = 0.01, 64.0
LONGEST_DATE_CHARACTERS = 40

_PHASE_WORDS = (
    (Phase.FILM, re.compile(r"\bfilm\b")),
    (Phase.SOLUTION, re.compile(r"\bsolution\b|\bsoln\b|\bdissolved\b")),
    (Phase.GAS, re.compile(r"\bgas(?:eous)?\b|\bvapou?r\b")),
    (Phase.LIQUID, re.compile(r"\bliquid\b")),
    (Phase.SOLID, re.compile(r"\bsolid\b|\bpowder\b|\bcrystal(?:line|s)?\b")),
)
_NUMBER = r"\s*(\d+(?:\.\d*)?|\.\d+)\s*"
_RESOLUTION = re.compile(_NUMBER + r"(?:$|1\s*/\s*cm|cm\s*\^?\s*\(?-|wavenumber|at\b|;|,)", re.IGNORECASE)
_PATH = re.compile(_NUMBER + r"(um|\u00b5m|\u03bcm|mm|cm|m)\b", re.IGNORECASE)
_CM_FOR_EACH = {"um": 1e-4, "\u00b5m": 1e-4, "\u03bcm": 1e-4, "mm": 0.1, "cm": 1.0, "m": 100.0}


def stated(headers: Mapping[str, str]) -> dict[str, object]:
    """Phase, resolution, path and date as far as the header states them.

    headers : normalised label -> text, as in `SpectrumBlock.headers`. Keys of the answer, each None where nothing is
    plainly stated: phase (a value of `Phase`: gas, liquid, solid, film or solution), resolution_cm1 and path_length_cm
    (above zero), measured_date (the header's own words, not interpreted: "01/06/01" has no one meaning).
    """
    return {
        "phase": _phase(headers.get("STATE", "")),
        "resolution_cm1": resolution_named(headers.get("RESOLUTION", "")),
        "path_length_cm": _path_length_cm(headers.get("PATHLENGTH", "")),
        "measured_date": _date(headers.get("LONGDATE", "")) or _date(headers.get("DATE", "")),
    }


def resolution_named(text: str) -> float | None:
    """The resolution in cm-1; None where the text is empty, zero, in another unit or out of range."""
    match = _RESOLUTION.match(text.strip().partition("\n")[0])
    if match is None:
        return None
    value = float(match.group(1))
    return value if FINEST_RESOLUTION_CM1 <= value <= COARSEST_RESOLUTION_CM1 else None


def _phase(text: str) -> str | None:
    words = re.split(r"[(\[,;:\n]", text.lower(), maxsplit=1)[0]
    named = [phase for phase, pattern in _PHASE_WORDS if pattern.search(words)]
    if Phase.FILM in named and set(named) <= {Phase.FILM, Phase.SOLID, Phase.LIQUID}:
        return Phase.FILM.value  # "solid film", "liquid film"
    return named[0].value if len(named) == 1 else None


def _path_length_cm(text: str) -> float | None:
    match = _PATH.match(text)
    if match is None or float(match.group(1)) <= 0:
        return None
    return float(match.group(1)) * _CM_FOR_EACH[match.group(2).lower()]


def _date(text: str) -> str | None:
    first_line = text.strip().partition("\n")[0].strip()
    return first_line if re.search(r"\d{2}", first_line) and len(first_line) <= LONGEST_DATE_CHARACTERS else None
