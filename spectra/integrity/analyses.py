"""Analyses: the result against its digest, the order and the result against what the trail recorded of both."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator

from labsite.trail.events import Event
from labsite.trail.verify import Damage
from spectra.integrity.rows import Told, differing, each_row, settled, told
from spectra.models import Analysis, AnalysisState


def damaged_analyses() -> Iterator[Damage]:
    """Every analysis against its digest, and against what the trail recorded when it was ordered and finished."""
    yield from settled(_analyses)


def _analyses() -> Iterator[Damage]:
    ordered, finished = _by_analysis(Event.ANALYSIS_QUEUED), _by_analysis(Event.ANALYSIS_FINISHED)

    def check(row: Analysis) -> Iterator[Damage]:
        where, order, end = f"analysis {row.pk}", ordered.pop(row.pk, None), finished.pop(row.pk, None)
        if order is None:
            yield Damage(where, "No entry of the trail says that it was ordered.")
        elif order.subject_id != str(row.spectrum.examination_id):
            yield Damage(where, f"It is of another examination than entry {order.seq} says.")
        elif names := differing(order.facts, _order(row)):
            yield Damage(where, f"It differs from what entry {order.seq} ordered: {names}.")
        if row.state != AnalysisState.DONE:
            if end is not None:
                yield Damage(where, "The trail says that it was finished; the row does not.")
            return
        if not isinstance(row.result, bytes | memoryview):
            yield Damage(where, "The stored result is not what an analysis stores.")
        elif hashlib.sha256(bytes(row.result)).hexdigest() != row.result_digest:
            yield Damage(where, "The stored result does not fit its digest.")
        if end is None:
            yield Damage(where, "No entry of the trail says that it was finished.")
        elif names := differing(end.facts, _outcome(row)):
            yield Damage(where, f"Its result is not the one that the trail recorded: {names}.")

    rows = Analysis.objects.select_related("spectrum__upload", "method", "group_table", "reference", "watch_list")
    yield from each_row(rows, "analysis", check)
    for pk in sorted(ordered.keys() | finished.keys()):
        what = "finished" if pk in finished else "ordered"
        yield Damage(f"analysis {pk}", f"The trail says that it was {what}; it is gone.")


def _by_analysis(event: Event) -> dict[int, Told]:
    return {entry.facts["analysis"]: entry for entry in told(event) if isinstance(entry.facts.get("analysis"), int)}


def _order(row: Analysis) -> dict[str, object]:
    return {
        "file": row.spectrum.upload.file_name,
        "block": row.spectrum.block_index,
        "method": row.method.number,
        "group_table": row.group_table.number,
        "reference": row.reference.code if row.reference else "",
        "watch_list": str(row.watch_list or ""),
    }


def _outcome(row: Analysis) -> dict[str, object]:
    return {
        "result_digest": row.result_digest,
        "curves_sha256": row.curves_sha256,
        "core_version": row.core_version,
    }
