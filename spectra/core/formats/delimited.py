"""Read spectra from delimited text: one abscissa column and one or several ordinate columns, each of them a spectrum.

The separator and the decimal sign are found by asking which pair turns the lines into rows of numbers of one length.
Units come from the header or from the answers of a person. Columns are counted from 1, the abscissa being column 1.
"""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass

import numpy as np

from spectra.core import checks
from spectra.core.errors import CoreError
from spectra.core.formats import ordinates
from spectra.core.formats.axis import REMEDY_EXPORT, UNEVEN_SHARE
from spectra.core.formats.jcamp_labels import clean_text
from spectra.core.formats.limits import (
    MAX_COLUMNS,
    MAX_HEADER_CHARACTERS,
    MAX_HEADERS_KEPT,
    MAX_POINTS,
    MAX_TITLE_CHARACTERS,
)
from spectra.core.types import AxisUnit, Finding, ReadOptions, RefusedBlock, Severity, SpectrumBlock

_LOOKED_AT_LINES = 200  # the table must begin within them
_LINES_TO_AGREE = 3  # so many rows in sequence show the layout
_COMMENT_MARKS = ("#", "%", "!", "'", "//")
_REMEDY = (
    "Give one table of numbers: the abscissa first, then one column for each spectrum, parted by comma, semicolon, "
    "tab or blanks."
)


@dataclass(frozen=True)
class _Layout:
    """How a line is parted. `separator` is a regular expression; `decimal` the decimal sign."""

    separator: str
    decimal: str

    @property
    def number(self) -> str:
        point = re.escape(self.decimal)
        return rf"[+-]?(?:[0-9]++(?:{point}[0-9]*+)?|{point}[0-9]++)(?:[eE][+-]?[0-9]{{1,3}}+)?"

    def row(self, columns: str) -> re.Pattern[str]:
        """A whole line of `columns` further numbers (a quantifier) after the first; a closing separator is allowed."""
        return re.compile(
            rf"[ \t]*{self.number}(?:{self.separator}{self.number}){columns}[ \t]*(?:{self.separator})?[ \t]*"
        )


_LAYOUTS = (
    _Layout(r" *\t *", "."),
    _Layout(r" *\t *", ","),
    _Layout(r"[ \t]*;[ \t]*", "."),
    _Layout(r"[ \t]*;[ \t]*", ","),
    _Layout(r"[ \t]*,[ \t]*", "."),
    _Layout(r"[ \t]++", "."),
    _Layout(r"[ \t]++", ","),
)
_SPLITTERS = {r" *\t *": "\t", r"[ \t]*;[ \t]*": ";", r"[ \t]*,[ \t]*": ",", r"[ \t]++": None}
_X_KEY = re.compile(r"(?:x[ _-]?(?:units?|axis|label)|abscissa(?: unit)?)\s*[:=,;\t]\s*(.+)", re.IGNORECASE)
_Y_KEY = re.compile(r"(?:y[ _-]?(?:units?|axis|label)|ordinate(?: unit)?)\s*[:=,;\t]\s*(.+)", re.IGNORECASE)
_TITLE_KEY = re.compile(r"title\s*[:=,;\t]\s*(.+)", re.IGNORECASE)
_PLAIN_KIND = re.compile(
    r"(?:\w+\s)?(?:%\s?|percent )?(?:absorbance|transmittance|reflectance)(?:\s\w+)?", re.IGNORECASE
)
_ANY_NUMBER = re.compile(r"[ \t]*[+-]?(?:[0-9]|[.,][0-9])")


@dataclass(frozen=True)
class _Table:
    x: np.ndarray  # float64, shape (rows,), as written
    columns: np.ndarray  # float64, shape (rows, ordinate columns)
    first_line: int
    header: list[str]  # the lines above the table, comment marks taken off
    names: list[str]  # one for each column from the last header line, empty where it has other fields than the table
    names_above: list[str]  # the same from the line above it: some writers give names and units a line each


def read_delimited(text: str, options: ReadOptions) -> list[SpectrumBlock | RefusedBlock]:
    """Every ordinate column asked for, in the order of the file.

    Raises CoreError with ``reader.not_recognised``, ``reader.bad_row``, ``reader.missing_value``,
    ``reader.too_many_columns``, ``reader.too_many_points``, ``reader.number_too_large``, ``reader.x_unit_unknown``
    (question "x_unit"), ``reader.columns_unclear`` or ``reader.column_unknown`` (question "columns"),
    ``reader.x_not_monotonic``, ``reader.x_not_positive`` or ``reader.x_unit_implausible``, and the line. What concerns
    one column alone becomes a RefusedBlock.
    """
    table = _parse(text)
    findings: list[Finding] = []
    unit = _axis_unit(table, options, findings)
    chosen = _chosen_columns(table, options)
    x_cm1, order = _ascending_cm1(table, unit)
    ordinates.check_axis_unit(x_cm1, unit.value, options.x_unit is not None, table.first_line)
    steps = np.abs(np.diff(table.x))
    even = unit is AxisUnit.CM1 and bool(np.ptp(steps) <= UNEVEN_SHARE * np.median(steps))
    blocks: list[SpectrumBlock | RefusedBlock] = []
    for column in chosen:
        title = _title(table, column, len(chosen))
        try:
            blocks.append(_read_column(table, column, len(blocks), title, x_cm1, order, unit, even, options, findings))
        except CoreError as error:
            blocks.append(RefusedBlock(len(blocks), title, error.problem, tuple(findings)))
    return blocks


def _read_column(
    table: _Table,
    column: int,
    index: int,
    title: str,
    x_cm1: np.ndarray,
    order: slice,
    unit: AxisUnit,
    even: bool,
    options: ReadOptions,
    findings: list[Finding],
) -> SpectrumBlock:
    declared = _declared_ordinate(table, column)
    named = ordinates.ordinate_named(declared) if declared else None
    line = max(table.first_line - 1, 1)
    used, y, more = ordinates.settle_ordinate(
        table.columns[:, column - 2][order], declared, named, options, " ".join(table.header), line
    )
    x_cm1, y = checks.as_trace(x_cm1, y)
    headers = {f"LINE{number}": text for number, text in enumerate(table.header[:MAX_HEADERS_KEPT], 1) if text}
    return SpectrumBlock(
        index=index,
        title=title,
        x_cm1=x_cm1,
        y=y,
        ordinate_used=used,
        ordinate_declared=declared,
        axis_unit_declared=_declared_unit(table) or unit.value,
        coding="delimited",
        self_checking=False,
        evenly_spaced=even,
        headers=headers,
        findings=tuple(findings + more),
    )


def _parse(text: str) -> _Table:
    lines = text.split("\n")
    while lines and not lines[-1].strip():
        lines.pop()
    start, layout, count = _find_table(lines)
    if count > MAX_COLUMNS:
        raise CoreError(
            "reader.too_many_columns", f"The table has {count} columns; at most {MAX_COLUMNS} are read.", line=start + 1
        )
    if (len(lines) - start) * (count - 1) > MAX_POINTS:
        raise CoreError("reader.too_many_points", f"The table holds more than {MAX_POINTS} values.", line=start + 1)
    row = layout.row(f"{{{count - 1}}}")
    rows = []
    for number, line in enumerate(lines[start:], start + 1):
        if row.fullmatch(line):
            rows.append(line)
        elif not _is_remark(line):
            raise _bad_row(line, number, layout, count)
    joined = "\n".join(rows)
    if layout.decimal == ",":
        joined = joined.replace(",", ".")
    values = np.fromstring(joined.replace(";", " ").replace(",", " "), sep=" ").reshape(len(rows), count)
    if not np.isfinite(values).all():
        raise CoreError("reader.number_too_large", "A number of the table is too large.", line=start + 1)
    header = [clean_text(line.strip().lstrip("".join(_COMMENT_MARKS)), MAX_HEADER_CHARACTERS) for line in lines[:start]]
    _refuse_commas_in_two_roles(joined, layout, count, start + 1)
    written = [line for line in header if line]
    names, above = (_column_names(line, layout, count) for line in ([""] * 2 + written)[:-3:-1])
    return _Table(values[:, 0], values[:, 1:], start + 1, header, names, above)


def _find_table(lines: list[str]) -> tuple[int, _Layout, int]:
    """Index of the first row, layout, and number of columns. Raises CoreError ``reader.not_recognised``."""
    layouts = [(layout, layout.row("++")) for layout in _LAYOUTS]
    for start in range(min(len(lines), _LOOKED_AT_LINES)):
        if not _ANY_NUMBER.match(lines[start]):
            continue
        for layout, pattern in layouts:
            sample = [line for line in lines[start : start + 4 * _LINES_TO_AGREE] if not _is_remark(line)][
                :_LINES_TO_AGREE
            ]
            if len(sample) < _LINES_TO_AGREE or not all(pattern.fullmatch(line) for line in sample):
                continue
            counts = {len(_fields(line, layout)) for line in sample}
            if len(counts) == 1:
                count = counts.pop()
                _refuse_rows_above(lines[:start], layout, count)
                return start, layout, count
    raise CoreError(
        "reader.not_recognised", "The file is neither JCAMP-DX nor a table of numbers.", line=1, remedy=_REMEDY
    )


def _is_remark(line: str) -> bool:
    return not line.strip() or line.lstrip().startswith(_COMMENT_MARKS)


def _refuse_rows_above(lines: list[str], layout: _Layout, count: int) -> None:
    """A row of numbers must never pass for a header line: then a point would be lost in silence."""
    row = layout.row(f"{{{count - 1}}}")
    for number, line in enumerate(lines, 1):
        if row.fullmatch(line):
            message = "A row of numbers stands apart from the table: the lines between them are no rows."
            raise CoreError("reader.bad_row", message, line=number, remedy=REMEDY_EXPORT)


def _fields(line: str, layout: _Layout) -> list[str]:
    splitter = _SPLITTERS[layout.separator]
    fields = [field.strip() for field in line.strip(" ").split(splitter)]
    return fields[:-1] if len(fields) > 1 and not fields[-1] else fields


def _bad_row(line: str, number: int, layout: _Layout, count: int) -> CoreError:
    fields = [field.strip() for field in line.strip(" ").split(_SPLITTERS[layout.separator])]
    if len(fields) == count + 1 and not fields[-1]:
        fields.pop()
    if len(fields) != count:
        message = f"The row has {len(fields)} columns; the rows before it have {count}."
        return CoreError("reader.bad_row", message, line=number, remedy=REMEDY_EXPORT)
    if any(not field for field in fields):
        return CoreError("reader.missing_value", "A value of the row is missing.", line=number, remedy=REMEDY_EXPORT)
    wrong = next((field for field in fields if not re.fullmatch(layout.number, field)), line)
    return CoreError(
        "reader.bad_row",
        f"{clean_text(wrong, 40)!r} is no number in a table of numbers.",
        line=number,
        remedy=REMEDY_EXPORT,
    )


def _column_names(line: str, layout: _Layout, count: int) -> list[str]:
    """The fields of a header line if they are as many as the columns; a quoted name may hold the separator."""
    splitter = _SPLITTERS[layout.separator]
    if splitter is None:
        fields = re.findall(r'"[^"]*"|\S+', line)
    else:
        fields = next(csv.reader([line], delimiter=splitter, skipinitialspace=True), [])
    if len(fields) != count:
        return [""] * count
    return [clean_text(field.strip().strip("\"'"), MAX_TITLE_CHARACTERS) for field in fields]


def _refuse_commas_in_two_roles(joined: str, layout: _Layout, count: int, line: int) -> None:
    """``400,5,0,12`` may be two numbers with decimal commas or four whole ones; nothing in such a table tells."""
    if layout.decimal == "." and "," in joined and count >= 4 and "." not in joined:
        raise CoreError(
            "reader.decimal_comma",
            "The comma seems to part the columns and to be the decimal sign as well.",
            line=line,
            remedy="Export with a semicolon or a tab between the columns.",
        )


def _declared_unit(table: _Table) -> str:
    """The words that name the unit of the abscissa: the name of its column, or a header line about the abscissa.

    Other lines are not trusted: "resolution 4 cm-1" says nothing about the axis.
    """
    keyed = [match.group(1) for match in map(_X_KEY.match, table.header) if match]
    for words in (table.names[0], table.names_above[0], *keyed):
        if ordinates.x_unit_named(words):
            return clean_text(words, MAX_TITLE_CHARACTERS)
    return ""


def _axis_unit(table: _Table, options: ReadOptions, findings: list[Finding]) -> AxisUnit:
    declared = _declared_unit(table)
    named = ordinates.x_unit_named(declared) if declared else None
    line = max(table.first_line - 1, 1)
    if options.x_unit is not None:
        if named is not None and named is not options.x_unit:
            message = f"The file declares {declared!r}; the abscissa is read in {options.x_unit.value}, as answered."
            facts = {"label": "abscissa", "declared": declared, "decoded": options.x_unit.value}
            findings.append(Finding("reader.x_unit_overridden", Severity.WARNING, message, line=line, facts=facts))
        return options.x_unit
    if named is None:
        raise CoreError(
            "reader.x_unit_unknown",
            "The file does not state the unit of its abscissa.",
            line=line,
            remedy="State the unit of the abscissa: cm-1, um or nm.",
            question="x_unit",
        )
    return named


def _chosen_columns(table: _Table, options: ReadOptions) -> list[int]:
    present = range(2, table.columns.shape[1] + 2)
    if options.columns is not None:
        for column in options.columns:
            if column not in present:
                raise CoreError(
                    "reader.column_unknown",
                    f"Column {column} is asked for; ordinates stand in columns 2 to {present[-1]}.",
                    line=table.first_line,
                    remedy="Columns are counted from 1, the abscissa being column 1.",
                    question="columns",
                )
        return list(dict.fromkeys(options.columns))
    named = [column for column in present if ordinates.ordinate_named(table.names[column - 1]) is not None]
    if named and len(named) < len(present):
        others = ", ".join(repr(table.names[column - 1]) for column in present if column not in named)
        raise CoreError(
            "reader.columns_unclear",
            f"Some columns are named as ordinates of a spectrum, others are not: {clean_text(others, 200)}.",
            line=max(table.first_line - 1, 1),
            remedy="State which columns hold spectra, counted from 1, the abscissa being column 1.",
            question="columns",
        )
    return list(present)


def _declared_ordinate(table: _Table, column: int) -> str:
    """The words that name the ordinate: the name of the column, a header line about the ordinate, or one that names it
    alone.

    Other lines are not trusted: "measured in transmission" is a way to measure and no unit.
    """
    keyed = [match.group(1) for match in map(_Y_KEY.match, table.header) if match]
    alone = [line for line in table.header if _PLAIN_KIND.fullmatch(line)]
    for words in (table.names[column - 1], table.names_above[column - 1], *keyed, *alone):
        if ordinates.ordinate_named(words) is not None:
            return clean_text(words, MAX_TITLE_CHARACTERS)
    return ""


def _title(table: _Table, column: int, chosen: int) -> str:
    names = [
        row[column - 1]
        for row in (table.names, table.names_above)
        if row[column - 1] and ordinates.ordinate_named(row[column - 1]) is None
    ]
    titled = [match.group(1) for match in map(_TITLE_KEY.match, table.header) if match]
    candidates = [*names, table.names[column - 1], *titled] if chosen > 1 else [*titled, *names]
    return clean_text(next((text for text in candidates if text), "").strip("\"' "), MAX_TITLE_CHARACTERS)


def _ascending_cm1(table: _Table, unit: AxisUnit) -> tuple[np.ndarray, slice]:
    """Positions in cm-1, ascending, and the slice that puts ordinates into the same order."""
    x = table.x
    steps = np.diff(x)
    wrong = np.flatnonzero(steps * np.sign(x[-1] - x[0]) <= 0)
    if len(wrong):
        place = int(wrong[0])
        raise CoreError(
            "reader.x_not_monotonic",
            f"The abscissa goes from {x[place]:.10g} to {x[place + 1]:.10g}, against the direction of the table.",
            line=table.first_line + place + 1,
            remedy=REMEDY_EXPORT,
        )
    if x.min() < 0 or (unit is not AxisUnit.CM1 and x.min() == 0):
        raise CoreError(
            "reader.x_not_positive", "The abscissa holds values that are not positive.", line=table.first_line
        )
    if unit is AxisUnit.MICROMETRE:
        x = 1e4 / x
    elif unit is AxisUnit.NANOMETRE:
        x = 1e7 / x
    order = slice(None) if x[0] < x[-1] else slice(None, None, -1)
    return x[order], order
