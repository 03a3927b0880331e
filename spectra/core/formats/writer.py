"""Export a spectrum so that it reads back bit for bit: JCAMP-DX 5.01 (AFFN or DIFDUP) and delimited text."""

from __future__ import annotations

import numpy as np

from spectra.core import checks
from spectra.core.errors import CoreError
from spectra.core.formats.jcamp_labels import clean_text
from spectra.core.formats.limits import MAX_TITLE_CHARACTERS
from spectra.core.types import Ordinate

LONGEST_LINE_CHARACTERS = 78
MOST_REPEATS = 9  # some readers know only counts of one figure
MOST_FIGURES = 2.0**40  # of an ordinate in difference form, so that its differences stay exact
_UNITS = {
    Ordinate.ABSORBANCE: ("ABSORBANCE", "absorbance"),
    Ordinate.TRANSMITTANCE: ("TRANSMITTANCE", "transmittance"),
    Ordinate.PERCENT_TRANSMITTANCE: ("PERCENT TRANSMITTANCE", "transmittance (%)"),
    Ordinate.REFLECTANCE: ("REFLECTANCE", "reflectance"),
    Ordinate.ABSORPTIVITY: ("ABSORPTIVITY", "absorptivity"),
}
_SQZ = {1: "@ABCDEFGHI", -1: "@abcdefghi"}
_DIF = {1: "%JKLMNOPQR", -1: "%jklmnopqr"}
_DUP = " STUVWXYZs"


def write_jcamp(
    title: str, x_cm1: object, y: object, ordinate: Ordinate, form: str = "AFFN", y_factor: float | None = None
) -> bytes:
    """One block of JCAMP-DX 5.01.

    x_cm1 : positions in cm-1, strictly increasing; y : ordinates in the unit of `ordinate`; form : "AFFN" or "DIFDUP".
    An axis that is not the even one between its ends is written as pairs. DIFDUP needs ordinates that are whole
    multiples of a factor: `y_factor`, or the power of two that fits. Raises CoreError with ``writer.form_unknown`` or
    ``writer.not_exact`` where the form cannot carry the values bit for bit, and ``trace.*`` from the gate.
    """
    x_cm1, y = checks.as_trace(x_cm1, y)
    x, values, even = _even_direction(x_cm1, y)
    if form == "AFFN":
        factor = 1.0
        table = _counted_lines(x, values) if even else _pair_lines(x_cm1, y)
    elif form == "DIFDUP":
        if not even:
            raise CoreError(
                "writer.not_exact",
                "The axis is not evenly spaced, which the form DIFDUP needs.",
                remedy="Export as AFFN.",
            )
        factor, whole = _whole_multiples(values, y_factor)
        table = _difference_lines(x, whole)
    else:
        raise CoreError("writer.form_unknown", f"{form!r} is neither AFFN nor DIFDUP.")
    head = [
        f"##TITLE={clean_text(title, MAX_TITLE_CHARACTERS).replace(chr(10), ' ').replace('$$', '')}",
        "##JCAMP-DX=5.01",
        "##DATA TYPE=INFRARED SPECTRUM",
        "##ORIGIN=",
        "##OWNER=",
        "##XUNITS=1/CM",
        f"##YUNITS={_UNITS[ordinate][0]}",
        "##XFACTOR=1",
        f"##YFACTOR={factor!r}",
        f"##FIRSTX={_plain(x[0])}",
        f"##LASTX={_plain(x[-1])}",
        f"##FIRSTY={_plain(values[0])}",
        f"##MINY={_plain(y.min())}",
        f"##MAXY={_plain(y.max())}",
        f"##NPOINTS={len(y)}",
        "##XYDATA=(X++(Y..Y))" if even else "##XYPOINTS=(XY..XY)",
    ]
    return ("\n".join([*head, *table, "##END="]) + "\n").encode("utf-8")


def write_delimited(x_cm1: object, y: object, ordinate: Ordinate) -> bytes:
    """Two columns parted by commas under a header that names their units. Raises CoreError with ``trace.*``."""
    x_cm1, y = checks.as_trace(x_cm1, y)
    rows = [f"{_plain(position)},{_plain(value)}" for position, value in zip(x_cm1, y, strict=True)]
    return ("\n".join([f"wavenumber (cm-1),{_UNITS[ordinate][1]}", *rows]) + "\n").encode("ascii")


def _even_direction(x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray, bool]:
    """The arrays in the order in which FIRSTX, LASTX and NPOINTS give the axis bit for bit; whether there is one."""
    for step in (1, -1):
        if np.array_equal(np.linspace(x[::step][0], x[::step][-1], len(x)), x[::step]):
            return x[::step], y[::step], True
    return x, y, False


def _plain(value: float) -> str:
    """The shortest decimal that reads back to the same float64, without exponent: E is also a squeezed figure."""
    return np.format_float_positional(value, unique=True, trim="-")


def _counted_lines(x: np.ndarray, y: np.ndarray) -> list[str]:
    lines: list[str] = []
    line = ""
    for position, value in zip(x, y, strict=True):
        word = " " + _plain(value)
        if not line or len(line) + len(word) > LONGEST_LINE_CHARACTERS:
            if line:
                lines.append(line)
            line = f"{position:.6f}"
        line += word
    return [*lines, line]


def _pair_lines(x: np.ndarray, y: np.ndarray) -> list[str]:
    return [f"{_plain(position)}, {_plain(value)}" for position, value in zip(x, y, strict=True)]


def _whole_multiples(y: np.ndarray, y_factor: float | None) -> tuple[float, list[int]]:
    """The factor and whole numbers whose products are `y`, bit for bit. Raises CoreError ``writer.not_exact``."""
    powers = [2.0**-bits for bits in range(0, 53, 4)]
    for factor in [y_factor] if y_factor is not None else powers:
        whole = np.rint(y / factor)
        if np.abs(whole).max() < MOST_FIGURES and np.array_equal(whole * factor, y):
            return float(factor), [int(value) for value in whole]
    raise CoreError(
        "writer.not_exact",
        "The ordinates are no whole multiples of one factor, which the form DIFDUP needs to carry them exactly.",
        remedy="Export as AFFN.",
    )


def _packed(value: int, letters: dict[int, str]) -> str:
    """A whole number whose first figure and sign are one letter."""
    figures = str(abs(value))
    return letters[-1 if value < 0 else 1][int(figures[0])] + figures[1:]


def _difference_lines(x: np.ndarray, whole: list[int]) -> list[str]:
    """Lines of one full ordinate and differences with counts; each repeats the last ordinate of the line before.

    A blank parts the abscissa from an ordinate such as E839, which some readers take for an exponent.
    """
    lines = []
    place = 0  # the point with which the line begins
    while place < len(whole) - 1:
        line = f"{x[place]:.6f} {_packed(whole[place], _SQZ)}"
        while place < len(whole) - 1:
            difference = whole[place + 1] - whole[place]
            count = 1
            while (
                count < MOST_REPEATS
                and place + count + 1 < len(whole)
                and whole[place + count + 1] - whole[place + count] == difference
            ):
                count += 1
            word = _packed(difference, _DIF) + (_DUP[count] if count > 1 else "")
            if len(line) + len(word) > LONGEST_LINE_CHARACTERS:
                break
            line += word
            place += count
        lines.append(line)
    lines.append(f"{x[place]:.6f} {_packed(whole[place], _SQZ)}")
    return lines
