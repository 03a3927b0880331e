"""What this layer guards: rows the database itself refuses to change, and checks that verification runs over them."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator

from labsite.errors import DomainError
from labsite.signing.models import Meaning
from labsite.trail.events import Event
from labsite.trail.models import TrailEntry
from labsite.trail.triggers import register_append_only, register_trigger
from labsite.trail.verify import Damage, register_verifier
from spectra import store
from spectra.models import Analysis, ApprovalState, RawFile
from spectra.services.approvals import APPROVABLE, content_hash_of

KEPT = "spectrum upload examination sample container delivery".split()


def register() -> None:
    register_append_only("spectra_rawfile")
    register_append_only("spectra_contribution")
    register_append_only("spectra_instrumentcheck")
    register_append_only("spectra_analysis", updates=True)
    for name in KEPT:
        register_append_only(f"spectra_{name}", updates=True)
    for model, _ in APPROVABLE.values():
        register_append_only(model._meta.db_table, updates=True)
    final = "a finished analysis is never changed"
    register_trigger(
        "finished_analysis_is_final",
        "spectra_analysis",
        sqlite=f"SELECT RAISE(ABORT, '{final}') WHERE OLD.state IN ('done', 'failed');",
        postgres=f"""
            IF OLD.state IN ('done', 'failed')
            THEN RAISE EXCEPTION '{final}' USING ERRCODE = 'integrity_constraint_violation'; END IF;
        """,
        when="BEFORE UPDATE",
    )
    register_verifier("raw files", damaged_files)
    register_verifier("analyses", damaged_analyses)
    register_verifier("approved master data", changed_master_data)


def damaged_files() -> Iterator[Damage]:
    """Every raw file and every stored curve against its name."""
    for sha256, noun in _named_files():
        try:
            store.get(sha256)
        except (DomainError, OSError) as error:
            yield Damage(where=f"{noun} {sha256}", what=str(error))


def _named_files() -> Iterator[tuple[str, str]]:
    for sha256 in RawFile.objects.order_by("pk").values_list("sha256", flat=True).iterator():
        yield sha256, "raw file"
    curves = Analysis.objects.filter(state="done").exclude(curves_sha256="").order_by("pk")
    for sha256 in curves.values_list("curves_sha256", flat=True).iterator():
        yield sha256, "curves"


def damaged_analyses() -> Iterator[Damage]:
    """Every finished analysis against its digest, and against what the trail recorded when it was finished."""
    recorded = _recorded_analyses()
    rows = Analysis.objects.order_by("pk").only("pk", "state", "result", "result_digest", "curves_sha256")
    for row in rows.iterator(chunk_size=100):
        where, promised = f"analysis {row.pk}", recorded.pop(row.pk, None)
        if row.state != "done":
            if promised is not None:
                yield Damage(where=where, what="The trail says that it was finished; the row does not.")
            continue
        if hashlib.sha256(bytes(row.result)).hexdigest() != row.result_digest:
            yield Damage(where=where, what="The stored result does not fit its digest.")
        elif promised is not None and promised != (row.result_digest, row.curves_sha256):
            yield Damage(where=where, what="Its result is not the one that the trail recorded.")
        elif (
            promised is None
            and not TrailEntry.objects.filter(
                event=Event.ANALYSIS_FINISHED, search_text__contains=row.result_digest
            ).exists()
        ):
            yield Damage(where=where, what="No entry of the trail says that it was finished.")
    for pk in recorded:
        yield Damage(where=f"analysis {pk}", what="The trail says that it was finished; it is gone.")


def _recorded_analyses() -> dict[int, tuple[str, str]]:
    found: dict[int, tuple[str, str]] = {}
    entries = TrailEntry.objects.filter(event=Event.ANALYSIS_FINISHED).order_by("seq")
    for stored in entries.values_list("canonical", flat=True).iterator(chunk_size=1000):
        try:
            facts = json.loads(bytes(stored))["facts"]
            found[facts["analysis"]] = (facts["result_digest"], facts["curves_sha256"])
        except (ValueError, KeyError, TypeError):
            continue  # the chain reports an entry that cannot be read
    return found


def changed_master_data() -> Iterator[Damage]:
    """Every approved or retired record against the signature over its content."""
    for kind, (model, _) in APPROVABLE.items():
        for row in model.objects.select_related("approval").order_by("pk").iterator(chunk_size=100):
            where, signature = f"{kind} {row}", row.approval
            if row.state == ApprovalState.DRAFT:
                if signature is not None:
                    yield Damage(where=where, what="It was approved, and was made a draft again.")
                continue
            if signature is None or row.content_hash != signature.content_hash:
                yield Damage(where=where, what="It is marked approved without a signature over its content.")
                continue
            about = (signature.kind, signature.subject_id, signature.meaning, signature.signer_id)
            if about != (kind, str(row.pk), Meaning.APPROVED, row.approved_by_id):
                yield Damage(where=where, what="Its approval carries a signature that was made for something else.")
            if content_hash_of(row) != row.content_hash:
                yield Damage(where=where, what="Its content differs from what was approved.")
