"""The abscissa of a JCAMP-DX block, and every declaration of its header against what was decoded.

Rule for equally spaced data, found on real files: FIRSTX, LASTX and the number of points that were decoded give the
axis. The abscissae printed on the lines must lie on it; writers are allowed to truncate them, and to print all of them
a whole number of steps away (residual carbon dioxide lines prove FIRSTX and LASTX right in such files). Anything else
means that lines were lost, swapped or cut.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spectra.core.errors import CoreError
from spectra.core.formats.asdf import DataTable, PairTable
from spectra.core.formats.jcamp_labels import Block, Number
from spectra.core.types import Finding, Severity

FURTHEST_SHIFT_STEPS = 2
FEWEST_LINES_FOR_A_SHIFT = 3
FEWEST_LINES_FOR_A_DRIFT = 6
LARGEST_SLACK_STEPS = 0.3  # what the rounding of FIRSTX and LASTX may excuse
COARSEST_UNIT_STEPS = 0.5  # labels printed more coarsely cannot tell a drift or a truncation from exchanged lines
UNHEEDED_STEPS = 0.05  # writers reckon their abscissae in single precision; a lost point moves a line by a whole step
DELTAX_UNITS = 1.5  # of its last written figure: found rounded, truncated, and reckoned from rounded ends
SINGLE_PRECISION = 2.0**-22  # what a spacing loses that was reckoned or subtracted in single precision
UNEVEN_SHARE = 0.05  # spacings that differ by less than this share of their median are even
REMEDY_EXPORT = "Export the spectrum again from the instrument; do not edit the file."


@dataclass(frozen=True)
class Axis:
    """x : float64, shape (points,), in the declared unit and in the order of the file."""

    x: np.ndarray
    evenly_spaced: bool
    findings: tuple[Finding, ...]


def even_axis(block: Block, table: DataTable) -> Axis:
    """The axis of an (X++(Y..Y)) table.

    Raises CoreError with ``reader.label_missing``, ``reader.label_not_a_number``, ``reader.factor_zero``,
    ``reader.too_few_points``, ``reader.axis_contradicts``, ``reader.points_lost``, ``reader.points_added`` or
    ``reader.x_check_failed``, and the line.
    """
    findings: list[Finding] = []
    points = len(table.y)
    declared_points = _declared_points(block, findings)
    if points < 2:
        raise CoreError("reader.too_few_points", f"The data table holds {points} point.", line=int(table.line[0]))
    factor = declared_factor(block, "XFACTOR", findings)
    label = table.label * factor
    first = _first_x(block, float(label[0]), float(table.label_unit[0] * abs(factor)), int(table.line[0]), findings)
    last = _last_x(block, first, declared_points or points, findings)
    if first.value == last.value:
        raise CoreError("reader.axis_contradicts", f"FIRSTX and LASTX are both {first.text}.", line=last.line)
    step = (last.value - first.value) / (points - 1)
    residual = label - (first.value + table.first_index * step)
    unit = table.label_unit * abs(factor)
    slack = min(0.5 * (first.unit + last.unit), LARGEST_SLACK_STEPS * abs(step)) + UNHEEDED_STEPS * abs(step)
    outside = np.abs(residual) > 0.5 * unit + slack
    if outside.any():
        if declared_points is not None and declared_points.value != points:
            raise _points_differ(
                points, declared_points, _first_line_beside(label, first, last, declared_points, table, unit, slack)
            )
        findings.append(_excused_labels(residual, unit, slack, step, table, label))
    elif declared_points is not None and declared_points.value != points:
        findings.append(_labels_decide(points, declared_points, first, last, step, table, unit, slack))
    return Axis(np.linspace(first.value, last.value, points), True, tuple(findings))


def pair_axis(block: Block, table: PairTable) -> Axis:
    """The axis of an (XY..XY) table. Raises as `even_axis` does, and ``reader.x_not_monotonic``."""
    findings: list[Finding] = []
    points = len(table.x)
    declared_points = _declared_points(block, findings)
    if declared_points is not None and declared_points.value != points:
        raise _points_differ(points, declared_points, int(table.line[-1]))
    if points < 2:
        raise CoreError("reader.too_few_points", f"The data table holds {points} point.", line=int(table.line[0]))
    x = table.x * declared_factor(block, "XFACTOR", findings)
    steps = np.diff(x)
    direction = 1.0 if x[-1] > x[0] else -1.0
    wrong = np.flatnonzero(steps * direction <= 0)
    if len(wrong):
        place = int(wrong[0])
        raise CoreError(
            "reader.x_not_monotonic",
            f"The abscissa goes from {x[place]:.10g} to {x[place + 1]:.10g}, against the direction of the table.",
            line=int(table.line[place + 1]),
            remedy=REMEDY_EXPORT,
        )
    _check_ends(block, x, table, findings)
    median = float(np.median(np.abs(steps)))
    departure = np.abs(np.abs(steps) - median)
    even = bool(departure.max() <= UNEVEN_SHARE * median)
    if not even and np.mean(departure > UNEVEN_SHARE * median) < 0.01:
        # A table that is even but for a few places: a pair may be missing or a figure changed there.
        place = int(np.argmax(departure))
        message = (
            f"The spacing is {steps[place]:.6g} here and {direction * median:.6g} elsewhere: a point may be missing "
            "or changed."
        )
        findings.append(Finding("reader.spacing_uneven", Severity.WARNING, message, line=int(table.line[place + 1])))
    return Axis(x, even, tuple(findings))


def declared_factor(block: Block, label: str, findings: list[Finding]) -> float:
    """XFACTOR or YFACTOR; 1 with a finding where it is missing. Raises CoreError ``reader.factor_zero``."""
    number = block.number(label)
    if number is None:
        message = f"{label} is missing; the figures of the table are taken as they stand."
        findings.append(
            Finding("reader.label_missing", Severity.WARNING, message, line=block.line, facts={"label": label})
        )
        return 1.0
    if number.value == 0:
        raise CoreError("reader.factor_zero", f"{label} is zero.", line=number.line, remedy=REMEDY_EXPORT)
    return number.value


def declaration_findings(block: Block, x: np.ndarray, y_raw: np.ndarray, y_factor: float) -> list[Finding]:
    """DELTAX, MINX, MAXX, FIRSTY, MINY and MAXY against the data; each difference names label, declared and decoded
    value.

    x : in the declared unit, file order; y_raw : the figures before YFACTOR. Tolerance: one unit of the last written
    figure and half a YFACTOR, because headers are found truncated as well as rounded.
    """
    findings = _spacing_finding(block, x)
    step = abs(x[1] - x[0])
    for label, decoded in (("MINX", x.min()), ("MAXX", x.max())):
        number = _optional(block, label, findings)
        if number is not None and abs(number.value - decoded) > number.unit + 1e-9 * abs(decoded):
            steps = (number.value - decoded) / step if step else 0.0
            message = f"{label} is declared as {number.text}; the axis has {decoded:.8g} ({steps:+.2f} steps)."
            findings.append(_differs(label, number, float(decoded), message))
    y = y_raw * y_factor
    ratios = []
    for label, place in (("FIRSTY", 0), ("MINY", int(np.argmin(y))), ("MAXY", int(np.argmax(y)))):
        number = _optional(block, label, findings)
        if number is None:
            continue
        decoded, tolerance = float(y[place]), number.unit + 0.5 * abs(y_factor) + 1e-9 * abs(y[place])
        if abs(number.value - decoded) <= tolerance:
            continue
        finding = _ordinate_difference(label, number, decoded, float(y_raw[place]), tolerance)
        findings.append(finding)
        if finding.severity is Severity.WARNING and decoded:
            ratios.append(number.value / decoded)
    if len(ratios) >= 2 and min(ratios) > 0 and max(ratios) / min(ratios) < 1.001:
        message = (
            f"{len(ratios)} declared ordinates stand to the decoded ones as {np.mean(ratios):.6g} to 1: YFACTOR may "
            "be misprinted; it is used as it stands."
        )
        facts = {"label": "YFACTOR", "declared": block.text("YFACTOR"), "decoded": float(y_factor * np.mean(ratios))}
        findings.append(
            Finding(
                "reader.yfactor_doubtful",
                Severity.SERIOUS,
                message,
                line=block.line_of("YFACTOR"),
                remedy=REMEDY_EXPORT,
                facts=facts,
            )
        )
    return findings


def _ordinate_difference(label: str, number: Number, decoded: float, raw: float, tolerance: float) -> Finding:
    if label == "FIRSTY" and abs(number.value - raw) <= number.unit:
        message = (
            f"FIRSTY is declared as {number.text}, the figure of the table before YFACTOR; {decoded:.8g} is meant."
        )
        return Finding(
            "reader.firsty_unscaled", Severity.INFO, message, line=number.line, facts=_facts(label, number, decoded)
        )
    for factor, words in (
        (100.0, "in percent, while the data are fractions"),
        (0.01, "as a fraction, while the data are in percent"),
    ):
        if abs(number.value - factor * decoded) <= max(number.unit, factor * tolerance):
            message = f"{label} is declared as {number.text}, {words} ({decoded:.6g})."
            return Finding(
                "reader.declared_in_other_scale",
                Severity.INFO,
                message,
                line=number.line,
                facts=_facts(label, number, decoded),
            )
    return _differs(label, number, decoded, f"{label} is declared as {number.text}; the data have {decoded:.8g}.")


def _spacing_finding(block: Block, x: np.ndarray) -> list[Finding]:
    findings: list[Finding] = []
    number = _optional(block, "DELTAX", findings)
    if number is None:
        return findings
    spacing = float(x[-1] - x[0]) / (len(x) - 1)
    error = abs(number.value - spacing)
    ends = [end.unit for label in ("FIRSTX", "LASTX") if (end := _optional(block, label, [])) is not None]
    rounding = 0.5 * sum(ends) / (len(x) - 1)
    if error > DELTAX_UNITS * number.unit + rounding + SINGLE_PRECISION * abs(spacing):
        findings.append(
            _differs(
                "DELTAX",
                number,
                spacing,
                f"DELTAX is declared as {number.text}; FIRSTX, LASTX and the points give {spacing:.10g}.",
            )
        )
    elif error * (len(x) - 1) > 0.5 * abs(spacing):
        message = (
            f"DELTAX is rounded to {number.text}; over {len(x)} points that would be {error * (len(x) - 1):.3g} off, "
            "so it is not used."
        )
        findings.append(
            Finding(
                "reader.deltax_rounded",
                Severity.INFO,
                message,
                line=number.line,
                facts=_facts("DELTAX", number, spacing),
            )
        )
    return findings


def _differs(label: str, number: Number, decoded: float, message: str) -> Finding:
    return Finding(
        f"reader.{label.lower()}_differs",
        Severity.WARNING,
        message,
        line=number.line,
        facts=_facts(label, number, decoded),
    )


def _facts(label: str, number: Number, decoded: float) -> dict[str, object]:
    return {"label": label, "declared": number.text, "decoded": decoded}


def _optional(block: Block, label: str, findings: list[Finding]) -> Number | None:
    """A number that only serves to check; what is no number becomes a finding."""
    try:
        return block.number(label)
    except CoreError as error:
        findings.append(
            Finding(
                error.problem.code,
                Severity.WARNING,
                error.problem.message,
                line=error.problem.line,
                facts={"label": label},
            )
        )
        return None


def _declared_points(block: Block, findings: list[Finding]) -> Number | None:
    number = block.number("NPOINTS")
    if number is None:
        message = "NPOINTS is missing; whether points were lost at the end cannot be told from it."
        findings.append(
            Finding("reader.label_missing", Severity.WARNING, message, line=block.line, facts={"label": "NPOINTS"})
        )
        return None
    if number.value < 1 or number.value % 1 != 0:
        raise CoreError(
            "reader.label_not_a_number", f"NPOINTS is {number.text}, which is no number of points.", line=number.line
        )
    return number


def _first_x(block: Block, label: float, unit: float, line: int, findings: list[Finding]) -> Number:
    number = block.number("FIRSTX")
    if number is not None:
        return number
    message = f"FIRSTX is missing; the first line begins at {label:.8g}, which is used."
    findings.append(
        Finding(
            "reader.label_missing",
            Severity.WARNING,
            message,
            line=block.line,
            facts={"label": "FIRSTX", "decoded": label},
        )
    )
    return Number(label, unit, line, f"{label:.8g}")


def _last_x(block: Block, first: Number, points: Number | int, findings: list[Finding]) -> Number:
    number = block.number("LASTX")
    if number is not None:
        return number
    spacing = block.number("DELTAX")
    if spacing is None or spacing.value == 0:
        raise CoreError(
            "reader.label_missing",
            "LASTX is missing, and DELTAX does not stand in for it.",
            line=block.line,
            remedy=REMEDY_EXPORT,
        )
    steps = (points.value if isinstance(points, Number) else points) - 1
    value = first.value + steps * spacing.value
    message = f"LASTX is missing; FIRSTX, DELTAX and NPOINTS give {value:.8g}."
    findings.append(
        Finding(
            "reader.label_missing",
            Severity.WARNING,
            message,
            line=block.line,
            facts={"label": "LASTX", "decoded": value},
        )
    )
    return Number(value, spacing.unit, spacing.line, f"{value:.8g}")


def _first_line_beside(
    label: np.ndarray, first: Number, last: Number, declared: Number, table: DataTable, unit: np.ndarray, slack: float
) -> int:
    """The first line beside the axis that the header declares: there something is missing or too much."""
    step = (last.value - first.value) / max(declared.value - 1, 1)
    outside = np.abs(label - (first.value + table.first_index * step)) > 0.5 * unit + slack
    return int(table.line[int(np.argmax(outside)) if outside.any() else -1])


def _points_differ(points: int, declared: Number, line: int) -> CoreError:
    lost = points < declared.value
    return CoreError(
        "reader.points_lost" if lost else "reader.points_added",
        f"NPOINTS declares {declared.text} points, {points} were decoded, and the abscissae do not explain it: "
        + ("lines or figures are missing." if lost else "lines or figures were added."),
        line=line,
        remedy=REMEDY_EXPORT,
    )


def _excused_labels(
    residual: np.ndarray, unit: np.ndarray, slack: float, step: float, table: DataTable, label: np.ndarray
) -> Finding:
    """The finding for abscissae that are truncated, all shifted by whole steps, or drift by less than a step.

    NPOINTS holds here, so that no line can be missing. Raises CoreError ``reader.x_check_failed``.
    """
    most = FURTHEST_SHIFT_STEPS if len(residual) >= FEWEST_LINES_FOR_A_SHIFT else 0
    fine = bool(unit.max() <= COARSEST_UNIT_STEPS * abs(step))
    toward_zero = -np.sign(label)
    for shift in sorted(range(-most, most + 1), key=abs):
        left = residual - shift * step
        left[0] = min(left[0], residual[0], key=abs)  # the first line may stand right where all others are shifted
        rounded = bool((np.abs(left) <= 0.5 * unit + slack).all())
        truncated = fine and bool(((left * toward_zero >= -slack) & (left * toward_zero <= unit + slack)).all())
        if not rounded and not truncated:
            continue
        place = int(np.argmax(np.abs(residual)))
        facts = {
            "label": "abscissa of the line",
            "declared": float(label[place]),
            "decoded": float(label[place] - residual[place]),
        }
        if shift:
            message = (
                f"The abscissae printed on the lines lie {shift:+d} step ({shift * step:+.5g}) beside FIRSTX, LASTX "
                "and NPOINTS, which are used."
            )
            return Finding(
                "reader.x_labels_shifted", Severity.WARNING, message, line=int(table.line[place]), facts=facts
            )
        message = "The abscissae printed on the lines are truncated instead of rounded."
        return Finding("reader.x_labels_truncated", Severity.INFO, message, line=int(table.line[place]), facts=facts)
    wrong = np.abs(residual) > 0.5 * unit + slack
    place = int(np.argmax(wrong))
    if fine and _drifts(residual, unit, slack, step, table.first_index):
        facts = {
            "label": "abscissa of the line",
            "declared": float(label[place]),
            "decoded": float(label[place] - residual[place]),
        }
        message = (
            "The abscissae printed on the lines drift by up to one step against FIRSTX, LASTX and NPOINTS, which "
            "are used."
        )
        return Finding("reader.x_labels_drift", Severity.WARNING, message, line=int(table.line[place]), facts=facts)
    raise CoreError(
        "reader.x_check_failed",
        f"The line begins at {label[place]:.8g}; by FIRSTX, LASTX and the points before it, it should begin at "
        f"{label[place] - residual[place]:.8g}: "
        "lines were lost, swapped or changed.",
        line=int(table.line[place]),
        remedy=REMEDY_EXPORT,
    )


def _drifts(residual: np.ndarray, unit: np.ndarray, slack: float, step: float, index: np.ndarray) -> bool:
    """Whether the abscissae after the first run straight away from the axis and stay within one step of it.

    Found where a writer divides the range by the number of points instead of the number of steps.
    """
    if len(residual) < FEWEST_LINES_FOR_A_DRIFT or np.abs(residual).max() > abs(step) + slack + unit.max():
        return False
    place = index[1:] / index[-1]
    slope, start = np.polyfit(place, residual[1:], 1)
    return bool((np.abs(residual[1:] - (start + slope * place)) <= unit[1:] + slack).all())


def _labels_decide(
    points: int,
    declared: Number,
    first: Number,
    last: Number,
    step: float,
    table: DataTable,
    unit: np.ndarray,
    slack: float,
) -> Finding:
    """All abscissae fit the decoded points: NPOINTS alone is wrong, if they are fine enough to tell; else CoreError."""
    declared_step = (last.value - first.value) / max(declared.value - 1, 1)
    told_apart = abs(table.first_index[-1] * (step - declared_step)) > 2 * (0.5 * unit[-1] + slack)
    if len(table.line) < FEWEST_LINES_FOR_A_SHIFT or not told_apart:
        raise _points_differ(points, declared, int(table.line[-1]))
    message = f"NPOINTS is declared as {declared.text}; {points} points were decoded, and all abscissae confirm them."
    facts = {"label": "NPOINTS", "declared": declared.text, "decoded": points}
    return Finding("reader.npoints_differs", Severity.SERIOUS, message, line=declared.line, facts=facts)


def _check_ends(block: Block, x: np.ndarray, table: PairTable, findings: list[Finding]) -> None:
    first, last = block.number("FIRSTX"), block.number("LASTX")
    if first is None or last is None:
        findings.append(
            Finding(
                "reader.label_missing",
                Severity.WARNING,
                "FIRSTX or LASTX is missing.",
                line=block.line,
                facts={"label": "FIRSTX"},
            )
        )
        return

    def fits(number: Number, value: float) -> bool:
        return abs(number.value - value) <= number.unit + 1e-9 * abs(value)

    if fits(first, x[0]) and fits(last, x[-1]):
        return
    if fits(first, x[-1]) and fits(last, x[0]):
        message = f"FIRSTX and LASTX are exchanged: the table runs from {x[0]:.8g} to {x[-1]:.8g}."
        findings.append(
            Finding(
                "reader.ends_exchanged",
                Severity.WARNING,
                message,
                line=first.line,
                facts=_facts("FIRSTX", first, float(x[0])),
            )
        )
        return
    number, value, line = (last, x[-1], table.line[-1]) if fits(first, x[0]) else (first, x[0], table.line[0])
    raise CoreError(
        "reader.axis_contradicts",
        f"The header declares an end of the axis as {number.text}; the table has {value:.8g} there.",
        line=int(line),
        remedy=REMEDY_EXPORT,
    )
