"""Read the blocks of a JCAMP-DX file (4.24 and 5.01): infrared spectra are decoded, all else is named and refused."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np

from spectra.core import checks
from spectra.core.errors import CoreError
from spectra.core.formats import asdf, axis, jcamp_labels, ordinates
from spectra.core.formats.jcamp_labels import Block, Record, clean_text
from spectra.core.formats.limits import MAX_POINTS
from spectra.core.types import AxisUnit, Finding, Ordinate, ReadOptions, RefusedBlock, Severity, SpectrumBlock

_INFRARED = re.compile(r"INFRA[- ]?RED|\bFT[- ]?N?IR\b|\b[MNF]?IR\b")
_OTHER_THAN_INFRARED = re.compile(r"RAMAN|NMR|MASS|EPR|UV")
_COUNTED_FORM = re.compile(r"\s*\(?\s*X\s*\+\+\s*\(\s*Y\s*\.\.\s*Y\s*\)\s*\)?", re.IGNORECASE)
_PAIR_FORM = re.compile(r"\s*\(\s*XY\s*\.\.\s*XY\s*\)", re.IGNORECASE)
_UNIQUE_LABELS = ("XUNITS", "YUNITS", "XFACTOR", "YFACTOR", "FIRSTX", "LASTX", "NPOINTS", "DATATYPE")
_TECHNIQUE_LABELS = (
    "SAMPLINGPROCEDURE",
    "SAMPLEDESCRIPTION",
    "INSTRUMENTPARAMETERS",
    "INSTRUMENTALPARAMETERS",
    "ACCESSORY",
)
_ORDINATES_THAT_NAME_A_SPECTRUM = (Ordinate.TRANSMITTANCE, Ordinate.PERCENT_TRANSMITTANCE, Ordinate.ABSORBANCE)


def read_jcamp(text: str, options: ReadOptions) -> list[SpectrumBlock | RefusedBlock]:
    """Every block that is not a mere frame around others, in the order of the file.

    Raises CoreError only for the frame of the file (too many or too deep blocks, a label without its equals sign).
    """
    results: list[SpectrumBlock | RefusedBlock] = []
    points_left = MAX_POINTS
    for block in jcamp_labels.blocks(text):
        if block.holds_blocks and not block.tables:
            continue
        try:
            result: SpectrumBlock | RefusedBlock = _read_block(block, len(results), options, points_left)
            points_left -= len(result.y)
        except CoreError as error:
            result = RefusedBlock(len(results), block.title, error.problem, tuple(block.findings))
        results.append(result)
    return results


def _read_block(block: Block, index: int, options: ReadOptions, points_left: int) -> SpectrumBlock:
    findings = block.findings
    _refuse_other_techniques(block, findings)
    record = _only_table(block, findings)
    _compare_repeated_labels(block, findings)
    _refuse_cut(block, record, findings)
    unit, unit_answered = _axis_unit(block, options, findings)
    body, first_line, counted = _table_body(record)
    if counted:
        table = asdf.decode_table(body, first_line, points_left)
        placed = axis.even_axis(block, table)
        y_raw, coding = table.y, table.coding
        self_checking = table.coding in ("DIF", "DIFDUP") and table.unprotected_lines == 0
        _note_closing_check(table, findings)
    else:
        pairs = asdf.decode_pairs(body, first_line, points_left)
        placed = axis.pair_axis(block, pairs)
        y_raw, coding, self_checking = pairs.y, "XY", False
    findings.extend(placed.findings)
    y_factor = axis.declared_factor(block, "YFACTOR", findings)
    with np.errstate(over="ignore"):
        y = y_raw * y_factor
    if not np.isfinite(y).all():
        raise CoreError(
            "reader.number_too_large", "YFACTOR makes the ordinates too large.", line=block.line_of("YFACTOR")
        )
    against_header = axis.declaration_findings(block, placed.x, y_raw, y_factor)
    findings.extend(against_header)

    x_cm1, y = _ascending_cm1(placed.x, y, unit, record.line)
    ordinates.check_axis_unit(x_cm1, block.text("XUNITS"), unit_answered, block.line_of("XUNITS"))
    declared = block.text("YUNITS")
    technique = " ".join(block.text(label) for label in _TECHNIQUE_LABELS)
    used, y, more = ordinates.settle_ordinate(
        y, declared, ordinates.ordinate_named(declared), options, technique, block.line_of("YUNITS")
    )
    findings.extend(_confirmed_by_header(more, block, against_header))
    x_cm1, y = checks.as_trace(x_cm1, y)
    return SpectrumBlock(
        index=index,
        title=block.title,
        x_cm1=x_cm1,
        y=y,
        ordinate_used=used,
        ordinate_declared=declared,
        axis_unit_declared=block.text("XUNITS"),
        coding=coding,
        self_checking=self_checking,
        evenly_spaced=placed.evenly_spaced and unit is AxisUnit.CM1,
        headers=block.headers(),
        findings=tuple(findings),
    )


def _confirmed_by_header(found: list[Finding], block: Block, against_header: list[Finding]) -> list[Finding]:
    """Percent under a word for fractions is worth a mention only where FIRSTY, MINY and MAXY count in percent, too."""
    declared = {label for label in ("FIRSTY", "MINY", "MAXY") if block.text(label)}
    if not declared or declared & {str(item.facts.get("label")) for item in against_header}:
        return found
    return [
        replace(item, severity=Severity.INFO) if item.code == "reader.values_in_percent" else item for item in found
    ]


def _refuse_other_techniques(block: Block, findings: list[Finding]) -> None:
    declared = " ".join(block.text("DATATYPE").upper().split())
    line = block.line_of("DATATYPE") or block.line
    if not declared and "JCAMPCS" in block.first:
        raise CoreError(
            "reader.other_technique", "The block holds a chemical structure and no spectrum.", line=block.line
        )
    if not declared:
        known = (
            ordinates.x_unit_named(block.text("XUNITS"))
            and ordinates.ordinate_named(block.text("YUNITS")) in _ORDINATES_THAT_NAME_A_SPECTRUM
        )
        if not known:
            raise CoreError(
                "reader.data_type_missing", "The block does not say which technique its data come from.", line=line
            )
        message = "DATA TYPE is missing; the units are those of an infrared spectrum."
        findings.append(
            Finding("reader.label_missing", Severity.WARNING, message, line=line, facts={"label": "DATATYPE"})
        )
    elif not _INFRARED.search(declared) or _OTHER_THAN_INFRARED.search(declared):
        raise CoreError(
            "reader.other_technique",
            f"The block is declared as {clean_text(declared, 60)}, not as an infrared spectrum.",
            line=line,
            remedy="Only infrared spectra are read.",
        )
    elif "INTERFEROGRAM" in declared:
        raise CoreError(
            "reader.interferogram",
            "The block is an interferogram.",
            line=line,
            remedy="Export the transformed spectrum.",
        )
    elif "PEAK" in declared:
        raise _peak_table(line)
    if "NTUPLES" in block.first or block.text("DATACLASS").upper() == "NTUPLES":
        raise CoreError(
            "reader.ntuples",
            "The block holds several variables (NTUPLES), which are not read.",
            line=line,
            remedy="Export one spectrum as XYDATA.",
        )


def _peak_table(line: int) -> CoreError:
    return CoreError(
        "reader.peak_table",
        "The block holds a peak table and no spectrum.",
        line=line,
        remedy="Export the spectrum itself as XYDATA.",
    )


def _only_table(block: Block, findings: list[Finding]) -> Record:
    data = [table for table in block.tables if table.label in ("XYDATA", "XYPOINTS")]
    others = [table for table in block.tables if table.label not in ("XYDATA", "XYPOINTS")]
    if not data:
        if any(table.label == "RADATA" for table in others):
            raise CoreError(
                "reader.interferogram",
                "The block is an interferogram.",
                line=others[0].line,
                remedy="Export the transformed spectrum.",
            )
        if others:
            raise _peak_table(others[0].line)
        raise CoreError("reader.no_data", "The block holds no data table.", line=block.line)
    if len(data) > 1:
        raise CoreError(
            "reader.two_tables",
            "The block holds a second data table: two files may have run together.",
            line=data[1].line,
            remedy=axis.REMEDY_EXPORT,
        )
    for table in others:
        findings.append(
            Finding(
                "reader.table_passed_over",
                Severity.INFO,
                f"The {table.label} beside the spectrum is not read.",
                line=table.line,
            )
        )
    return data[0]


def _compare_repeated_labels(block: Block, findings: list[Finding]) -> None:
    for record in block.repeated:
        first = block.first[record.label]
        if record.label not in _UNIQUE_LABELS:
            continue
        if first.text.split() != record.text.split():
            raise CoreError(
                "reader.label_contradicts_itself",
                f"{record.label} is {clean_text(first.text, 40)!r} in line {first.line} and "
                f"{clean_text(record.text, 40)!r} here.",
                line=record.line,
                remedy=axis.REMEDY_EXPORT,
            )
        message = f"{record.label} stands twice with the same value (lines {first.line} and {record.line})."
        findings.append(
            Finding("reader.label_repeated", Severity.INFO, message, line=record.line, facts={"label": record.label})
        )


def _refuse_cut(block: Block, record: Record, findings: list[Finding]) -> None:
    if block.closed:
        return
    last_line = record.line + record.text.count("\n")
    if not record.ended:
        raise CoreError(
            "reader.data_cut", "The file stops in the middle of a data line.", line=last_line, remedy=axis.REMEDY_EXPORT
        )
    findings.append(
        Finding(
            "reader.end_missing",
            Severity.SERIOUS,
            "The block is not closed by END: the end of the file may be missing.",
            line=last_line,
            remedy=axis.REMEDY_EXPORT,
        )
    )


def _axis_unit(block: Block, options: ReadOptions, findings: list[Finding]) -> tuple[AxisUnit, bool]:
    declared, line = block.text("XUNITS"), block.line_of("XUNITS") or block.line
    named = ordinates.x_unit_named(declared)
    if options.x_unit is not None:
        if named is not None and named is not options.x_unit:
            message = f"The file declares {declared!r}; the abscissa is read in {options.x_unit.value}, as answered."
            facts = {"label": "XUNITS", "declared": declared, "decoded": options.x_unit.value}
            findings.append(Finding("reader.x_unit_overridden", Severity.WARNING, message, line=line, facts=facts))
        return options.x_unit, True
    if named is None:
        raise CoreError(
            "reader.x_unit_unknown",
            f"The unit of the abscissa is declared as {clean_text(declared, 40)!r}, which is not known."
            if declared
            else "The file does not state the unit of its abscissa.",
            line=line,
            remedy="State the unit of the abscissa: cm-1, um or nm.",
            question="x_unit",
        )
    return named, False


def _table_body(record: Record) -> tuple[str, int, bool]:
    """The data lines, the line of the file on which they begin, and whether the form is (X++(Y..Y)) and not pairs."""
    head, _, rest = record.text.partition("\n")
    for pattern, counted in ((_COUNTED_FORM, True), (_PAIR_FORM, False)):
        form = pattern.match(head)
        if form is None:
            continue
        beside = head[form.end() :].strip()
        if beside:
            return beside + "\n" + rest, record.line, counted
        return rest, record.line + 1, counted
    raise CoreError(
        "reader.form_unknown",
        f"The form of the data table is {clean_text(head, 40)!r}, which is not read.",
        line=record.line,
    )


def _note_closing_check(table: asdf.DataTable, findings: list[Finding]) -> None:
    if table.ignored_check_line is not None:
        message = (
            "The closing line should repeat the last ordinate and holds zero; the last data line is not checked by it."
        )
        findings.append(Finding("reader.closing_check_empty", Severity.WARNING, message, line=table.ignored_check_line))
    elif table.last_line_unchecked:
        message = "No closing line repeats the last ordinate: the last data line is not checked."
        findings.append(Finding("reader.closing_check_missing", Severity.INFO, message, line=int(table.line[-1])))


def _ascending_cm1(x: np.ndarray, y: np.ndarray, unit: AxisUnit, line: int) -> tuple[np.ndarray, np.ndarray]:
    """Positions in cm-1, ascending, and the ordinates in the same order."""
    if x.min() < 0 or (unit is not AxisUnit.CM1 and x.min() == 0):
        raise CoreError("reader.x_not_positive", "The abscissa holds values that are not positive.", line=line)
    if unit is AxisUnit.MICROMETRE:
        x = 1e4 / x
    elif unit is AxisUnit.NANOMETRE:
        x = 1e7 / x
    return (x, y) if x[0] < x[-1] else (x[::-1], y[::-1])
