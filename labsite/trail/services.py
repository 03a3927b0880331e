"""What people do with the trail itself; each is an entry in it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from datetime import datetime

from labsite.accounts.models import User
from labsite.accounts.permissions import require

from . import exports, selectors
from .events import Event, Subject, in_words
from .record import record, unit_of_work
from .verify import Verification, verify

THE_TRAIL = Subject("trail", "trail", "audit trail")
DAMAGES_RECORDED = 20


def run_verification(*, by: User | None, progress: Callable[[int, int], None] | None = None) -> Verification:
    """Verify everything and record that it was done, by whom and with what result. None: the system itself."""
    if by is not None:
        require(by, *selectors.EXPORTERS)
    result = verify(progress)
    with unit_of_work():
        record(
            Event.TRAIL_VERIFIED,
            by=by,
            subject=THE_TRAIL,
            facts={
                "whole": result.ok,
                "entries": result.entries,
                "head_hash": result.head_hash,
                "root_hash": result.root_hash,
                "damages_found": len(result.damages),
                "damages": [f"{damage.where}: {damage.what}" for damage in result.damages[:DAMAGES_RECORDED]],
            },
        )
    return result


def export(*, by: User, as_json: bool, filters: dict[str, object]) -> Iterator[str]:
    """Record the export, then return its text in pieces: all entries that fit `filters` and existed before."""
    require(by, *selectors.EXPORTERS)
    through_seq = selectors.newest_seq()
    asked = {name: value for name, value in filters.items() if value not in ("", None)}
    kind, subject_id = filters.get("subject_kind", ""), filters.get("subject_id", "")
    whole_record = bool(kind and subject_id)
    with unit_of_work():
        record(
            Event.TRAIL_RECORD_EXPORTED if whole_record else Event.TRAIL_EXPORTED,
            by=by,
            subject=Subject(str(kind), str(subject_id), f"{in_words(str(kind)).lower()} {subject_id}")
            if whole_record
            else THE_TRAIL,
            facts={"format": "JSON" if as_json else "CSV", "through_entry": through_seq, "asked_for": asked},
        )
    rows = selectors.export_rows(selectors.matching(by=by, **filters), through_seq=through_seq)
    if not as_json:
        return exports.csv_lines(rows)
    shown = {name: value.isoformat() if isinstance(value, datetime) else value for name, value in asked.items()}
    return exports.json_lines(rows, head={"through_entry": through_seq, "asked_for": shown})
