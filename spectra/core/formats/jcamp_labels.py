"""Labelled records and blocks of a JCAMP-DX file.

Source of the rules: McDonald and Wilks, Appl. Spectrosc. 42 (1988) 151; names of labels are compared in capitals,
without blanks, dashes, slashes and underscores. A record begins where a line begins with ``##``; ``$$`` opens a
comment up to the end of its line; TITLE opens a block and END closes the innermost one.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field

from spectra.core.errors import CoreError
from spectra.core.formats.limits import (
    MAX_BLOCKS,
    MAX_HEADER_CHARACTERS,
    MAX_HEADERS_KEPT,
    MAX_LABELS,
    MAX_NESTING,
    MAX_TITLE_CHARACTERS,
)
from spectra.core.types import Finding, Severity

TABLES = ("XYDATA", "XYPOINTS", "PEAKTABLE", "PEAKASSIGNMENTS", "RADATA", "DATATABLE")

_RECORD = re.compile(r"\n[ \t]*##([^=\n]*)(=?)")
_COMMENT = re.compile(r"\$\$[^\n]*")
_IGNORED_IN_LABELS = str.maketrans("", "", " \t-/_")
_NUMBER = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[Ee][+-]?[0-9]{1,6})?")
_UNWANTED = re.compile("[\x00-\x08\x0b-\x1f\x7f\ud800-\udfff]")


@dataclass(frozen=True)
class Number:
    """A number as a header declares it: value, one unit of its last written figure, and its line."""

    value: float
    unit: float
    line: int
    text: str


@dataclass(frozen=True)
class Record:
    label: str  # normalised
    text: str  # the value, comments removed, not yet cleaned
    line: int
    ended: bool = True  # whether the last line of the value was ended


@dataclass
class Block:
    """The records between TITLE and END; `first` keeps the first record of each label."""

    line: int
    depth: int
    first: dict[str, Record] = field(default_factory=dict)
    tables: list[Record] = field(default_factory=list)
    repeated: list[Record] = field(default_factory=list)
    holds_blocks: bool = False
    closed: bool = False
    findings: list[Finding] = field(default_factory=list)

    def add(self, record: Record) -> None:
        if record.label in TABLES:
            self.tables.append(record)
        elif record.label in self.first:
            self.repeated.append(record)
        else:
            self.first[record.label] = record

    def text(self, label: str) -> str:
        """The cleaned value of a label, empty where it is missing."""
        record = self.first.get(label)
        return clean_text(record.text, MAX_HEADER_CHARACTERS) if record else ""

    def line_of(self, label: str) -> int | None:
        record = self.first.get(label)
        return record.line if record else None

    @property
    def title(self) -> str:
        return clean_text(self.text("TITLE"), MAX_TITLE_CHARACTERS)

    @property
    def is_link(self) -> bool:
        return self.text("DATATYPE").upper() == "LINK" or "BLOCKS" in self.first

    def headers(self) -> dict[str, str]:
        """Normalised label -> cleaned value, at most MAX_HEADERS_KEPT of them, in the order of the file."""
        kept = list(self.first)[:MAX_HEADERS_KEPT]
        return {clean_text(label, 80): self.text(label) for label in kept if label != "TITLE"}

    def number(self, label: str) -> Number | None:
        """The declared number; None where it is missing or empty. Raises CoreError ``reader.label_not_a_number``."""
        record = self.first.get(label)
        text = record.text.strip() if record else ""
        if record is None or not text:
            return None
        number = read_number(text, record.line)
        if number is None:
            raise CoreError(
                "reader.label_not_a_number",
                f"{label} is {clean_text(text, 40)!r}, which is no number.",
                line=record.line,
                remedy="Numbers need a decimal point and no blanks.",
            )
        return number


def read_number(text: str, line: int) -> Number | None:
    """A number in AFFN form with one unit of its last figure; None where the text is none or out of range."""
    text = text.strip()
    if not _NUMBER.fullmatch(text):
        return None
    mantissa, _, exponent = text.upper().partition("E")
    decimals = len(mantissa.partition(".")[2])
    power = int(exponent or 0) - decimals
    value = float(text)
    if abs(value) > 1e300 or not -300 < power < 300:
        return None
    return Number(value=value, unit=10.0**power, line=line, text=text)


def normalise_label(label: str) -> str:
    """``X-Units``, ``x_units`` and ``XUNITS`` are one label."""
    return label.upper().translate(_IGNORED_IN_LABELS)


def clean_text(text: str, limit: int) -> str:
    """Text without control characters and lone surrogates, without outer blanks, at most `limit` characters."""
    return _UNWANTED.sub("", text).strip()[:limit].rstrip()


def records(text: str) -> Iterator[Record]:
    """The records of a file in order. Raises CoreError with ``reader.too_many_labels``."""
    text = "\n" + text  # every record then begins behind a line end, which is quick to search for
    marks = _RECORD.finditer(text)
    current = next(marks, None)
    line, counted, found = 0, 0, 0
    while current is not None:
        following = next(marks, None)
        end = following.start() + 1 if following else len(text)
        line += text.count("\n", counted, current.start() + 1)
        counted = current.start() + 1
        found += 1
        if found > MAX_LABELS:
            raise CoreError("reader.too_many_labels", f"The file has more than {MAX_LABELS} labels.", line=line)
        label = (
            normalise_label(current.group(1))
            if current.group(2)
            else normalise_label(current.group(1).partition("$$")[0])
        )
        value = text[current.end() : end]
        if current.group(2) or label == "END":
            yield Record(
                label,
                _COMMENT.sub("", value) if "$$" in value else value,
                line,
                ended=following is not None or value.endswith("\n"),
            )
        else:
            raise CoreError(
                "reader.label_without_equals",
                f"The line begins with ## and has no equals sign: {clean_text(current.group(1), 40)!r}.",
                line=line,
            )
        current = following


def blocks(text: str) -> list[Block]:
    """All blocks in the order in which they begin, outer ones before the blocks they hold.

    Raises CoreError with ``reader.too_many_blocks`` or ``reader.nested_too_deep``.
    """
    found: list[Block] = []
    open_blocks: list[Block] = []
    for record in records(text):
        if record.label == "END":
            if open_blocks:
                open_blocks.pop().closed = True
            continue
        if not record.label:
            continue  # ##= is a comment
        if record.label == "TITLE" or not open_blocks:
            _open_block(record, found, open_blocks)
        open_blocks[-1].add(record)
    return found


def _open_block(record: Record, found: list[Block], open_blocks: list[Block]) -> None:
    if open_blocks and open_blocks[-1].tables and not open_blocks[-1].is_link:
        open_blocks.pop()  # a new title after the data: the block before was never ended
    if open_blocks:
        open_blocks[-1].holds_blocks = True
    if len(found) >= MAX_BLOCKS:
        raise CoreError("reader.too_many_blocks", f"The file has more than {MAX_BLOCKS} blocks.", line=record.line)
    if len(open_blocks) >= MAX_NESTING:
        raise CoreError("reader.nested_too_deep", f"Blocks are nested more than {MAX_NESTING} deep.", line=record.line)
    block = Block(line=record.line, depth=len(open_blocks))
    if record.label != "TITLE":
        message = f"The block does not begin with TITLE but with {clean_text(record.label, 40)}."
        block.findings.append(Finding("reader.title_missing", Severity.INFO, message, line=record.line))
    found.append(block)
    open_blocks.append(block)
