"""The number forms of JCAMP-DX data tables: AFFN, PAC, SQZ, DIF and DUP.

Source of the rules: McDonald and Wilks, Appl. Spectrosc. 42 (1988) 151 (JCAMP-DX 4.24), checked against published test
files. A data line begins with an abscissa in plain figures; the rest are ordinates. In DIF form the first ordinate of
a line is written in full, the others as differences; a line that ends in a difference is followed by a line that
repeats the last ordinate (the Y-check), which is compared and dropped. DUP counts all occurrences of an ordinate or a
difference.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spectra.core.errors import CoreError
from spectra.core.formats.limits import MAX_POINTS
from spectra.core.formats.tokens import ABSOLUTE, COUNT, DIFFERENCE, PLAIN, tokenise, too_many_points

EXACT_INTEGER = 2.0**53  # beyond it float64 no longer holds every integer, and a check could pass by rounding


@dataclass(frozen=True)
class DataTable:
    """A decoded (X++(Y..Y)) table, still without its factors.

    label : float64, shape (lines,), the abscissa printed on each line; label_unit : float64, shape (lines,), one unit
    of its last printed figure; first_index : int64, shape (lines,), the 0-based point at which the line begins (for a
    line with a Y-check the point it repeats); line : int64, shape (lines,), 1-based lines of the file. y : float64,
    shape (points,). `coding` names the densest form in use. `unprotected_lines` counts lines on which a changed figure
    could pass. `ignored_check_line` is the line of a closing Y-check that its writer left at zero.
    """

    label: np.ndarray
    label_unit: np.ndarray
    first_index: np.ndarray
    line: np.ndarray
    y: np.ndarray
    coding: str
    unprotected_lines: int
    ignored_check_line: int | None = None
    last_line_unchecked: bool = False


def decode_table(text: str, first_line: int = 1, points_left: int = MAX_POINTS) -> DataTable:
    r"""Decode the lines of an (X++(Y..Y)) table.

    text : the lines, ended by ``\n``, comments removed; first_line : line of the file on which it begins.
    Raises CoreError with ``reader.bad_character``, ``reader.bad_number``, ``reader.decimal_comma``,
    ``reader.missing_ordinate``, ``reader.line_without_abscissa``, ``reader.line_without_ordinate``,
    ``reader.repeat_without_value``, ``reader.repeat_not_whole``, ``reader.difference_without_start``,
    ``reader.difference_not_whole``, ``reader.too_many_points``, ``reader.number_too_large`` or
    ``reader.y_check_failed``, and the line.
    """
    tokens = tokenise(text, first_line, points_left)
    if not len(tokens.value):
        raise CoreError("reader.no_data", "The data table is empty.", line=first_line)
    opens = tokens.opens_line
    _refuse_where(
        opens & (tokens.kind != PLAIN),
        tokens.line,
        "reader.line_without_abscissa",
        "A data line does not begin with its abscissa.",
    )
    label = tokens.value[opens]
    starts = np.flatnonzero(opens)
    lengths = np.diff(np.append(starts, len(opens)))
    line = tokens.line[starts]
    _refuse_where(lengths < 2, line, "reader.line_without_ordinate", "A data line holds an abscissa and no ordinate.")

    ordinate = ~opens
    value, kind, token_line = tokens.value[ordinate], tokens.kind[ordinate], tokens.line[ordinate]
    item_starts = starts - np.arange(len(starts))  # where each line begins among the ordinates alone
    has_difference = bool((kind == DIFFERENCE).any())
    has_count = bool((kind == COUNT).any())
    coding = _coding(kind, tokens.packed, has_difference, has_count)
    if not has_difference and not has_count:
        if len(value) > points_left:
            raise too_many_points(points_left, int(token_line[points_left]))
        return DataTable(label, tokens.label_unit, item_starts, line, value, coding, len(line))

    repeats, item, value, kind = _repeats(value, kind, token_line, item_starts, points_left)
    # `item` maps the ordinates with their counts to the items without them: where each line begins among the items.
    item_starts = item[item_starts]
    if not has_difference:
        ends = np.cumsum(repeats)
        return DataTable(
            label, tokens.label_unit, (ends - repeats)[item_starts], line, np.repeat(value, repeats), coding, len(line)
        )
    return _undo_differences(label, tokens.label_unit, line, value, kind, repeats, item_starts, coding)


@dataclass(frozen=True)
class PairTable:
    """A decoded (XY..XY) table, still without its factors. x, y : float64, line : int64, each of shape (points,)."""

    x: np.ndarray
    y: np.ndarray
    line: np.ndarray


def decode_pairs(text: str, first_line: int = 1, points_left: int = MAX_POINTS) -> PairTable:
    """Decode the lines of an (XY..XY) table: pairs of plain numbers parted by commas, semicolons or blanks.

    Raises CoreError with ``reader.bad_character``, ``reader.bad_number``, ``reader.missing_ordinate``,
    ``reader.no_data``, ``reader.pair_incomplete`` or ``reader.too_many_points``, and the line.
    """
    tokens = tokenise(text.replace(",", " ").replace(";", " "), first_line, points_left)
    if not len(tokens.value):
        raise CoreError("reader.no_data", "The data table is empty.", line=first_line)
    _refuse_where(tokens.kind != PLAIN, tokens.line, "reader.bad_character", "A table of pairs holds packed figures.")
    starts = np.flatnonzero(tokens.opens_line)
    lengths = np.diff(np.append(starts, len(tokens.value)))
    _refuse_where(
        lengths % 2 != 0,
        tokens.line[starts],
        "reader.pair_incomplete",
        "A line holds an abscissa without its ordinate.",
    )
    if len(tokens.value) // 2 > points_left:
        raise too_many_points(points_left, int(tokens.line[2 * points_left]))
    return PairTable(tokens.value[0::2], tokens.value[1::2], tokens.line[0::2])


def _coding(kind: np.ndarray, packed: bool, has_difference: bool, has_count: bool) -> str:
    if has_difference:
        return "DIFDUP" if has_count else "DIF"
    if (kind == ABSOLUTE).any():
        return "SQZ"
    return "PAC" if packed else "AFFN"


def _repeats(
    value: np.ndarray, kind: np.ndarray, line: np.ndarray, line_starts: np.ndarray, points_left: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """How often each ordinate stands, the map from old to new indices, and values and kinds without the counts."""
    is_count = kind == COUNT
    alone = is_count.copy()
    alone[1:] &= is_count[:-1]  # a count after a count
    alone[line_starts] = is_count[line_starts]  # a count right after the abscissa
    _refuse_where(alone, line, "reader.repeat_without_value", "A repeat count does not follow an ordinate.")
    counts = value[is_count]
    _refuse_where(
        (counts < 1) | (counts != np.floor(counts)),
        line[is_count],
        "reader.repeat_not_whole",
        "A repeat count is not a whole number.",
    )
    item = np.cumsum(~is_count, dtype=np.int32) - 1
    repeats = np.ones(int(item[-1]) + 1)
    repeats[item[is_count]] = counts
    total = np.cumsum(repeats)
    most = points_left + len(line_starts)  # a Y-check may repeat a point on each line
    if total[-1] > most:  # before anything is expanded: one edited count can ask for 10^8 points
        raise too_many_points(points_left, int(line[~is_count][int(np.argmax(total > most))]))
    return repeats.astype(np.int64), item, value[~is_count], kind[~is_count]


def _undo_differences(
    label: np.ndarray,
    label_unit: np.ndarray,
    line: np.ndarray,
    value: np.ndarray,
    kind: np.ndarray,
    repeats: np.ndarray,
    item_starts: np.ndarray,
    coding: str,
) -> DataTable:
    """Sum the differences of each line, compare each Y-check with what it repeats, and drop it."""
    is_difference = kind == DIFFERENCE
    _refuse_where(
        is_difference[item_starts],
        line,
        "reader.difference_without_start",
        "A data line begins with a difference instead of a full ordinate.",
    )
    _refuse_inexact(value, line, item_starts)

    if len(value) != int(repeats.sum()):
        point, point_is_difference = np.repeat(value, repeats), np.repeat(is_difference, repeats)
    else:
        point, point_is_difference = value, is_difference
    sums = np.cumsum(np.where(point_is_difference, point, 0.0))
    if max(-sums.min(), sums.max()) >= EXACT_INTEGER:
        raise CoreError(
            "reader.number_too_large", "The differences add up to an ordinate with too many figures.", line=int(line[0])
        )
    full = np.flatnonzero(~point_is_difference)  # every point rests on the latest full ordinate at or before it
    y = sums + np.repeat(point[full] - sums[full], np.diff(np.append(full, len(point))))

    first = (np.cumsum(repeats) - repeats)[item_starts]  # of each line among the expanded points
    last = np.append(first[1:], len(y)) - 1
    ends_in_difference = is_difference[np.append(item_starts[1:], len(value)) - 1]
    checks = np.flatnonzero(ends_in_difference[:-1]) + 1  # lines that repeat the last ordinate of the line before
    differs = y[first[checks]] != y[last[checks - 1]]
    ignored = None
    if len(checks) and differs[-1] and _is_empty_closing_check(checks[-1], line, first, last, y):
        ignored, differs[-1] = int(line[-1]), False
    if differs.any():
        place = int(checks[int(np.argmax(differs))])
        raise CoreError(
            "reader.y_check_failed",
            f"The line repeats the last ordinate of the line before as {y[first[place]]:.0f}, but that line ends at "
            f"{y[last[place - 1]]:.0f}: figures or lines were changed or lost.",
            line=int(line[place]),
            remedy="Export the spectrum again from the instrument; do not edit the file.",
        )
    keep = np.ones(len(y), bool)
    keep[first[checks]] = False
    first_index = first - np.searchsorted(first[checks], first, "right")  # a dropped check points at what it repeats

    full_on_line = np.add.reduceat(~is_difference, item_starts, dtype=np.int32)
    checked_after = np.append(ends_in_difference[:-1], False)  # the closing check line itself needs no further check
    if ignored is not None:
        checked_after[-2] = False
    closing = np.zeros(len(line), bool)
    closing[-1] = len(line) > 1 and bool(ends_in_difference[-2]) and first[-1] == last[-1]
    unprotected = int(np.sum(~closing & ~(checked_after & (full_on_line == 1))))
    return DataTable(
        label,
        label_unit,
        first_index,
        line,
        y[keep],
        coding,
        unprotected,
        ignored,
        last_line_unchecked=bool(ends_in_difference[-1]),
    )


def _refuse_inexact(value: np.ndarray, line: np.ndarray, line_starts: np.ndarray) -> None:
    """Refuse ordinates that are no whole numbers or too large to be summed exactly."""
    fraction, large = value != np.floor(value), np.abs(value) >= EXACT_INTEGER
    if fraction.any() or large.any():
        lines = np.repeat(line, np.diff(np.append(line_starts, len(value))))
        message = "An ordinate in difference form is not a whole number."
        _refuse_where(fraction, lines, "reader.difference_not_whole", message)
        _refuse_where(large, lines, "reader.number_too_large", "An ordinate has too many figures.")


def _is_empty_closing_check(check: int, line: np.ndarray, first: np.ndarray, last: np.ndarray, y: np.ndarray) -> bool:
    """Some writers close the table with a zero where the last ordinate should stand again."""
    return bool(check == len(line) - 1 and first[check] == last[check] and y[first[check]] == 0)


def _refuse_where(wrong: np.ndarray, line: np.ndarray, code: str, message: str) -> None:
    if wrong.any():
        raise CoreError(code, message, line=int(line[int(np.argmax(wrong))]))
