"""Approval of master data: the hash of what is approved, the signature over it, and never by its author."""

from __future__ import annotations

import hashlib
from datetime import date

import rfc8785
from django.db import models
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import NotAllowed, NotPossible, NotVisible, Stale
from labsite.signing import services as signing
from labsite.signing.models import Meaning
from labsite.signing.services import SigningProof
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work
from spectra import permissions
from spectra.models import (
    ApprovalState,
    GroupTable,
    MaterialVersion,
    MethodVersion,
    Procedure,
    Reference,
    WatchList,
)

APPROVAL_COLUMNS = {"id", "state", "author", "created_at", "content_hash", "approved_by", "approved_at", "approval"}
NOT_CONTENT = APPROVAL_COLUMNS | {"superseded_by", "edited_by"}
APPROVABLE: dict[str, tuple[type[models.Model], Event]] = {
    "material": (MaterialVersion, Event.MATERIAL_APPROVED),
    "procedure": (Procedure, Event.PROCEDURE_APPROVED),
    "method": (MethodVersion, Event.METHOD_APPROVED),
    "group_table": (GroupTable, Event.GROUP_TABLE_APPROVED),
    "watch_list": (WatchList, Event.WATCH_LIST_APPROVED),
    "reference": (Reference, Event.REFERENCE_APPROVED),
}


def content_of(row: models.Model) -> dict[str, object]:
    """Everything in a versioned record that its approval covers, as canonical JSON types (numbers as text)."""
    content: dict[str, object] = {}
    for field in row._meta.concrete_fields:
        if field.name in NOT_CONTENT:
            continue
        content[field.name] = _plain(field.value_from_object(row))
    if isinstance(row, WatchList):
        content["items"] = [
            {"name": item.name, "reference": item.reference.code, "sha256": item.reference.raw_file.sha256}
            for item in row.items.select_related("reference__raw_file").order_by("pk")
        ]
    if isinstance(row, Reference):
        content["raw_sha256"] = row.raw_file.sha256
    return {"format": 1, "kind": row._meta.model_name, "content": content}


def _plain(value: object) -> object:
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    return value


def content_hash_of(row: models.Model) -> str:
    return hashlib.sha256(rfc8785.dumps(content_of(row))).hexdigest()


def subject_of(kind: str, row: models.Model) -> Subject:
    return Subject(kind, str(row.pk), str(row))


def approvable(kind: str, pk: int) -> models.Model:
    if kind not in APPROVABLE:
        raise NotVisible("approval.unknown_kind", "There is nothing of that kind to approve.")
    row = APPROVABLE[kind][0].objects.filter(pk=pk).first()
    if row is None:
        raise NotVisible("approval.unknown", "There is no such record.")
    return row


def approve(*, kind: str, pk: int, by: User, proof: SigningProof, content_hash: str) -> models.Model:
    """Approve a draft by signing its content. The version that was approved before is retired."""
    permissions.require_approver(by)
    model, event = APPROVABLE.get(kind, (None, None))
    if model is None:
        raise NotVisible("approval.unknown_kind", "There is nothing of that kind to approve.")
    with unit_of_work():
        row = model.objects.select_for_update().filter(pk=pk).first()
        if row is None:
            raise NotVisible("approval.unknown", "There is no such record.")
        if by.pk == row.author_id or by.pk in getattr(row, "edited_by", ()):
            raise NotAllowed(
                "approval.own_work", "You wrote this, so somebody else has to approve it.", remedy="Ask a colleague."
            )
        if row.state != ApprovalState.DRAFT:
            raise NotPossible("approval.not_a_draft", f"This record is {row.get_state_display()} already.")
        actual = content_hash_of(row)
        if actual != content_hash:
            raise Stale(
                "approval.changed", "The record changed since this page was shown.", remedy="Read it again, then sign."
            )
        signature = signing.sign(
            proof=proof,
            by=by,
            kind=kind,
            subject_id=str(row.pk),
            content_hash=actual,
            meaning=Meaning.APPROVED,
            label=str(row),
        )
        _retire_earlier(kind, row, by)
        row.state = ApprovalState.APPROVED
        row.content_hash = actual
        row.approved_by, row.approved_at, row.approval = by, timezone.now(), signature
        row.save()
        record(event, by=by, subject=subject_of(kind, row), facts={"content_hash": actual})
    return row


def _retire_earlier(kind: str, row: models.Model, by: User) -> None:
    """A material has one approved version at a time; editions, tables and references stay side by side, by date."""
    if not isinstance(row, MaterialVersion):
        return
    for earlier in MaterialVersion.objects.select_for_update().filter(
        material=row.material, state=ApprovalState.APPROVED
    ):
        earlier.state = ApprovalState.RETIRED
        earlier.save(update_fields=["state"])
        record(
            Event.MATERIAL_RETIRED,
            by=by,
            subject=subject_of(kind, earlier),
            reason=f"Version {row.number} was approved in its place.",
        )
