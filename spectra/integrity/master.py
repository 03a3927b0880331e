"""Approved master data: the content against its signature, each signature against the one record that carries it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator

from django.db.models import Model

from labsite.signing.models import Meaning, Signature
from labsite.trail.events import Event
from labsite.trail.verify import Damage
from spectra.integrity.rows import each_row, settled, told
from spectra.models import ApprovalState
from spectra.services.approvals import APPROVABLE, content_hash_of


def changed_master_data() -> Iterator[Damage]:
    """Every approved or retired record against the signature over its content, and every such signature against it."""
    yield from settled(_master_data)


def _master_data() -> Iterator[Damage]:
    made = list(
        Signature.objects.filter(kind__in=list(APPROVABLE)).order_by("pk").values_list("pk", "kind", "subject_id")
    )
    used: Counter[int] = Counter()
    stands = _states()
    for kind, (model, _) in APPROVABLE.items():
        rows = model.objects.select_related("approval")

        def check(row: Model, kind: str = kind) -> Iterator[Damage]:
            used[row.approval_id] += 1
            yield from _row_damages(kind, row)
            state = stands.get((kind, str(row.pk)), ApprovalState.DRAFT)
            if row.state != state:
                yield Damage(f"{kind} {row}", f"The trail says that it is {state.label}.")

        yield from each_row(rows, kind, check)
    for pk, kind, subject in made:
        if used[pk] == 0:
            yield Damage(f"signature {pk}", f"What it approved, {kind} {subject}, is gone or carries it no longer.")
        elif used[pk] > 1:
            yield Damage(f"signature {pk}", "More than one record carries it as its approval.")


def _states() -> dict[tuple[str, str], ApprovalState]:
    """What the trail says each record became last; (kind, id) as in its entries."""
    kinds = {str(event): kind for kind, (_, event) in APPROVABLE.items()} | {str(Event.MATERIAL_RETIRED): "material"}
    events = [event for _, event in APPROVABLE.values()]
    return {
        (kinds[entry.event], entry.subject_id): (
            ApprovalState.RETIRED if entry.event == Event.MATERIAL_RETIRED else ApprovalState.APPROVED
        )
        for entry in told(*events, Event.MATERIAL_RETIRED)
    }


def _row_damages(kind: str, row: Model) -> Iterator[Damage]:
    where, signature = f"{kind} {row}", row.approval
    if row.state == ApprovalState.DRAFT:
        if row.approval_id is not None:
            yield Damage(where, "It was approved, and was made a draft again.")
        return
    if signature is None or row.content_hash != signature.content_hash:
        yield Damage(where, "It is marked approved without a signature over its content.")
        return
    about = (signature.kind, signature.subject_id, signature.meaning, signature.signer_id)
    if about != (kind, str(row.pk), Meaning.APPROVED, row.approved_by_id):
        yield Damage(where, "Its approval carries a signature that was made for something else.")
    if content_hash_of(row) != row.content_hash:
        yield Damage(where, "Its content differs from what was approved.")
