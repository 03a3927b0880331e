"""The trail as files: CSV for a spreadsheet, JSON for a program. Pure text out of rows; the services record it."""

from __future__ import annotations

import csv
import json
import re
from collections.abc import Iterable, Iterator

from .canonical import utc_text
from .selectors import EntryRow

COLUMNS = (
    "entry",
    "time_utc",
    "event",
    "person",
    "user_name",
    "roles",
    "address",
    "record_kind",
    "record_id",
    "record",
    "reason",
    "facts",
    "old",
    "new",
    "request",
    "entry_hash",
)
# What makes a spreadsheet take a cell for a formula, full-width forms included.
_SIGNS = "=+\\-@\uff1d\uff0b\uff0d\uff20"
# A spreadsheet that takes a semicolon or a tab for the separator cuts a quoted cell in pieces, so a formula can begin
# after each of them; it passes over blanks and quotation marks in front.
_FORMULA = re.compile(rf"""(\A|[;,|\t\r\n])([\s"]*)([{_SIGNS}])""")


def safe_cell(text: str) -> str:
    """`text` such that a spreadsheet shows it instead of computing it: an apostrophe stands before a formula's sign,
    at the beginning and behind whatever a spreadsheet may take for a separator."""
    safe = _FORMULA.sub(r"\1\2'\3", text)
    return f"'{safe}" if safe.startswith(("\t", "\r", "\n")) else safe


class _Line:
    """What csv.writer writes to: hands each line back."""

    def write(self, line: str) -> str:
        return line


def csv_lines(rows: Iterable[EntryRow]) -> Iterator[str]:
    """CSV (RFC 4180, UTF-8 with a byte order mark so that spreadsheets read it as such), line by line."""
    writer = csv.writer(_Line(), lineterminator="\r\n")
    yield "\ufeff" + writer.writerow(COLUMNS)
    for row in rows:
        yield writer.writerow([safe_cell(str(value)) for value in _flat(row).values()])


def json_lines(rows: Iterable[EntryRow], *, head: dict[str, object]) -> Iterator[str]:
    """One JSON document, in pieces: `head` and then all entries.

    `canonical` is the stored text of an entry: SHA-256 over a zero byte and its UTF-8 bytes gives `entry_hash`.
    """
    yield json.dumps(head, ensure_ascii=False)[:-1] + ', "entries": ['
    separator = "\n"
    for row in rows:
        whole = {
            "entry": row.seq,
            "entry_hash": row.entry_hash,
            "person": {"name": row.actor_name, "user_name": row.actor_username, "address": row.address},
            "record": row.subject_label,
            "canonical": row.canonical,
        }
        yield separator + json.dumps(whole, ensure_ascii=False)
        separator = ",\n"
    yield "\n]}\n"


def _flat(row: EntryRow) -> dict[str, object]:
    values = (
        row.seq,
        utc_text(row.at),
        row.event,
        row.actor_name,
        row.actor_username,
        " ".join(row.actor_roles),
        row.address,
        row.subject_kind,
        row.subject_id,
        row.subject_label,
        row.reason,
        "; ".join(f"{name}: {value}" for name, value in row.facts),
        "; ".join(f"{change.name}: {change.before}" for change in row.changes if change.before),
        "; ".join(f"{change.name}: {change.after}" for change in row.changes if change.after),
        row.request_id,
        row.entry_hash,
    )
    return dict(zip(COLUMNS, values, strict=True))
