"""What the numbers of a file mean: units of the abscissa and kind of the ordinate, never guessed."""

from __future__ import annotations

import re

import numpy as np

from spectra.core.errors import CoreError
from spectra.core.types import AxisUnit, Finding, Ordinate, ReadOptions, Severity, Technique

HIGHEST_FRACTION = 2.0  # 95 % of the values of a transmittance spectrum in fractions lie below it
LOWEST_PERCENT = 5.0  # and above it where they are in percent; between the two a person is asked
HIGHEST_PERCENT = 200.0
HIGHEST_ABSORBANCE = 10.0  # no spectrometer tells one part in 10^10
LOWEST_WAVENUMBER_CM1, HIGHEST_WAVENUMBER_CM1 = (
    50.0,
    50_000.0,
)  # an axis wholly outside is in another unit than declared

_X_UNITS = (
    (
        AxisUnit.CM1,
        re.compile(r"1\s*/\s*cm|cm\s*\^?\s*\(?\s*[-\u2212\u207b]\s*[1\u00b9]|reciprocal centim|inverse centim"),
    ),
    (AxisUnit.MICROMETRE, re.compile(r"micro-?met|micron|\b[u\u00b5\u03bc]m\b")),
    (AxisUnit.NANOMETRE, re.compile(r"nano-?met|\bnm\b")),
)
_ABSORPTIVITY = re.compile(
    r"absorptivity|mol\s*/\s*mol|\bmol\b.*\b(?:m|cm)\s*\^?-1|(?:m|cm)\s*2\s*/\s*mol|l\s*/\s*\(?mol", re.IGNORECASE
)
_ORDINATE_ANSWERS = "absorbance, transmittance, percent_transmittance or reflectance"


def x_unit_named(text: str) -> AxisUnit | None:
    """The unit that a text names; None where it names none, or several."""
    lowered = text.lower()
    named = [unit for unit, pattern in _X_UNITS if pattern.search(lowered)]
    return named[0] if len(named) == 1 else None


def ordinate_named(text: str) -> Ordinate | None:
    """The kind that a text names, literally: without "percent" or % it is a fraction until the values are seen."""
    lowered = " ".join(text.lower().replace("_", " ").split())
    bare = re.sub(r"[\s()\[\].,:;\"']", "", lowered)
    percent = "%" in lowered or "percent" in lowered or "per cent" in lowered
    if (
        re.search(r"log.*1\s*/\s*r", lowered)
        or re.search(r"\babsorbance\b|\bextinction\b", lowered)
        or bare in ("a", "abs", "au", "absorbanceunits")
    ):
        return Ordinate.ABSORBANCE
    if _ABSORPTIVITY.search(lowered) or re.search(r"kubelka|\bk-?m\b", lowered):
        return Ordinate.ABSORPTIVITY
    if re.search(r"transmi(?:ttance|ssion)|\btrans\b", lowered) or bare in ("t", "%t", "t%"):
        return Ordinate.PERCENT_TRANSMITTANCE if percent else Ordinate.TRANSMITTANCE
    if "reflect" in lowered or bare in ("r", "%r", "r%", "r/r0"):
        return Ordinate.REFLECTANCE
    return None


def check_axis_unit(x_cm1: np.ndarray, declared: str, answered: bool, line: int | None) -> None:
    """Refuse an axis that lies wholly outside of what wavenumbers can be. x_cm1 : ascending, in cm-1."""
    if x_cm1[-1] < LOWEST_WAVENUMBER_CM1 or x_cm1[0] > HIGHEST_WAVENUMBER_CM1:
        raise CoreError(
            "reader.x_unit_implausible",
            f"Read in {declared or 'the unit given'}, the axis runs from {x_cm1[0]:.6g} to {x_cm1[-1]:.6g} cm-1, "
            "outside the infrared.",
            line=line,
            remedy="State the unit of the abscissa: cm-1, um or nm.",
            question=None if answered else "x_unit",
        )


def settle_ordinate(
    y: np.ndarray, declared: str, named: Ordinate | None, options: ReadOptions, header_technique: str, line: int | None
) -> tuple[Ordinate, np.ndarray, list[Finding]]:
    """Decide what the ordinates are, from the declaration, the values and the answers of a person.

    y : float64, shape (n,), with its factor; declared : the words of the file; named : what they literally name;
    header_technique : words of the file about how the sample was measured.
    Returns the kind, the values in its unit (only reflectance in percent is divided), and findings.
    Raises CoreError with ``reader.ordinate_unknown``, ``reader.ordinate_ambiguous``, ``reader.ordinate_implausible`` or
    ``reader.reflectance_unclear``, each with question "ordinate".
    """
    if options.ordinate is not None:
        return _answered(y, declared, named, options.ordinate, line)
    if named is None:
        raise CoreError(
            "reader.ordinate_unknown",
            f"The ordinate is declared as {declared!r}, which names neither absorbance nor transmittance."
            if declared
            else "The file does not say what its ordinates are.",
            line=line,
            remedy=f"State the ordinate: {_ORDINATE_ANSWERS}.",
            question="ordinate",
        )
    if named in (Ordinate.TRANSMITTANCE, Ordinate.PERCENT_TRANSMITTANCE):
        return _fraction_or_percent(y, declared, named, line)
    if named is Ordinate.REFLECTANCE:
        return _reflectance(y, declared, options.technique, header_technique, line)
    return _proportional(y, declared, named, line)


def _answered(
    y: np.ndarray, declared: str, named: Ordinate | None, answer: Ordinate, line: int | None
) -> tuple[Ordinate, np.ndarray, list[Finding]]:
    findings = []
    if named is not None and named is not answer:
        findings.append(
            Finding(
                "reader.ordinate_overridden",
                Severity.WARNING,
                f"The file declares {declared!r}; the ordinates are read as {answer.value}, as answered.",
                line=line,
                facts={"label": "YUNITS", "declared": declared, "decoded": answer.value},
            )
        )
    if answer is Ordinate.REFLECTANCE:
        y, more = _reflectance_as_fraction(y, declared, line)
        return answer, y, findings + more
    high = float(np.percentile(y, 95))
    expected = {
        Ordinate.TRANSMITTANCE: high <= HIGHEST_FRACTION,
        Ordinate.PERCENT_TRANSMITTANCE: HIGHEST_FRACTION < high <= HIGHEST_PERCENT,
        Ordinate.ABSORBANCE: high <= HIGHEST_ABSORBANCE,
    }
    if not expected.get(answer, True):
        findings.append(
            Finding(
                "reader.ordinate_unlikely",
                Severity.SERIOUS,
                f"Read as {answer.value}, as answered, 95 % of the values lie below {high:.4g}: check the answer.",
                line=line,
                facts={"label": "YUNITS", "declared": answer.value, "decoded": high},
            )
        )
    return answer, y, findings


def _fraction_or_percent(
    y: np.ndarray, declared: str, named: Ordinate, line: int | None
) -> tuple[Ordinate, np.ndarray, list[Finding]]:
    high = float(np.percentile(y, 95))
    in_percent = named is Ordinate.PERCENT_TRANSMITTANCE
    facts = {"label": "YUNITS", "declared": declared, "decoded": high}
    if high <= HIGHEST_FRACTION and not in_percent:
        return named, y, []
    if LOWEST_PERCENT <= high <= HIGHEST_PERCENT:
        if in_percent:
            return named, y, []
        message = (
            f"The file declares {declared!r}, a fraction, but 95 % of its values reach up to {high:.4g}: read as "
            "percent."
        )
        return (
            Ordinate.PERCENT_TRANSMITTANCE,
            y,
            [Finding("reader.values_in_percent", Severity.WARNING, message, line=line, facts=facts)],
        )
    raise CoreError(
        "reader.ordinate_ambiguous",
        f"The file declares {declared!r}, but 95 % of its values lie below {high:.4g}: fractions and percent cannot "
        "be told apart.",
        line=line,
        remedy="State whether the ordinate is transmittance (fraction) or percent_transmittance.",
        question="ordinate",
    )


def _reflectance(
    y: np.ndarray, declared: str, technique: Technique | None, header_technique: str, line: int | None
) -> tuple[Ordinate, np.ndarray, list[Finding]]:
    technique = technique or _technique_named(header_technique)
    if technique not in (Technique.ATR, Technique.DIFFUSE):
        raise CoreError(
            "reader.reflectance_unclear",
            f"The file declares {declared!r}; what reflectance means depends on the technique, which is not stated.",
            line=line,
            remedy=(
                "State the technique (attenuated total reflection or diffuse reflectance), or how the ordinate is "
                "to be read."
            ),
            question="ordinate",
        )
    y, findings = _reflectance_as_fraction(y, declared, line)
    if technique is Technique.ATR:
        message = "Reflectance measured by attenuated total reflection is read as transmittance."
        findings.append(Finding("reader.reflectance_as_transmittance", Severity.INFO, message, line=line))
        return Ordinate.TRANSMITTANCE, y, findings
    message = "Diffuse reflectance: choose Kubelka-Munk or log 1/R before bands are compared."
    findings.append(Finding("reader.diffuse_reflectance", Severity.INFO, message, line=line))
    return Ordinate.REFLECTANCE, y, findings


def _reflectance_as_fraction(y: np.ndarray, declared: str, line: int | None) -> tuple[np.ndarray, list[Finding]]:
    high = float(np.percentile(y, 95))
    if high <= HIGHEST_FRACTION:
        return y, []
    if not LOWEST_PERCENT <= high <= HIGHEST_PERCENT:
        raise CoreError(
            "reader.ordinate_ambiguous",
            f"The file declares {declared!r}, but 95 % of its values lie below {high:.4g}: neither fraction nor "
            "percent.",
            line=line,
            remedy=f"State the ordinate: {_ORDINATE_ANSWERS}.",
            question="ordinate",
        )
    message = f"Reflectance in percent (95 % of the values reach up to {high:.4g}) is divided by 100."
    facts = {"label": "YUNITS", "declared": declared, "decoded": high}
    return y / 100.0, [
        Finding(
            "reader.values_in_percent",
            Severity.INFO if "%" in declared else Severity.WARNING,
            message,
            line=line,
            facts=facts,
        )
    ]


def _technique_named(text: str) -> Technique | None:
    lowered = text.lower()
    attenuated = re.search(r"\batr\b|attenuated total|internal reflec", lowered)
    diffuse = re.search(r"\bdrifts?\b|diffuse", lowered)
    if bool(attenuated) == bool(diffuse):
        return None
    return Technique.ATR if attenuated else Technique.DIFFUSE


def _proportional(
    y: np.ndarray, declared: str, named: Ordinate, line: int | None
) -> tuple[Ordinate, np.ndarray, list[Finding]]:
    high = float(np.percentile(y, 95))
    if named is Ordinate.ABSORBANCE:
        if high > HIGHEST_ABSORBANCE:
            raise CoreError(
                "reader.ordinate_implausible",
                f"The file declares {declared!r}, but 95 % of its values reach up to {high:.4g}, more than any "
                "absorbance.",
                line=line,
                remedy=f"State the ordinate: {_ORDINATE_ANSWERS}.",
                question="ordinate",
            )
        if re.search(r"log", declared.lower()):
            message = "log 1/R is read as apparent absorbance."
            return named, y, [Finding("reader.log_inverse_reflectance", Severity.INFO, message, line=line)]
        return named, y, []
    if re.search(r"kubelka|k-?m", declared.lower()):
        message = "Kubelka-Munk values are read as proportional to absorbance; they carry no absorbance units."
        return named, y, [Finding("reader.kubelka_munk", Severity.INFO, message, line=line)]
    message = (
        f"The ordinate is an absorptivity ({declared}), proportional to absorbance; path and amount are not applied."
    )
    return named, y, [Finding("reader.absorptivity", Severity.INFO, message, line=line)]
