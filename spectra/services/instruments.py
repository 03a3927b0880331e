"""Instruments, accessories, qualification, checks, and the competence of people."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import date, datetime

from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import BadInput, NotVisible
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work
from spectra import permissions, store
from spectra.models import (
    Accessory,
    Activity,
    CheckVerdict,
    Competence,
    Instrument,
    InstrumentCheck,
    Qualification,
    RawFile,
)
from spectra.services.texts import bounded


def register_instrument(
    *, by: User, code: str, name: str, serial: str = "", accessories: Sequence[Mapping[str, object]] = ()
) -> Instrument:
    """An instrument with its accessories; each accessory measures by one technique."""
    permissions.require_method_owner(by)
    with unit_of_work():
        if Instrument.objects.filter(code=code).exists():
            raise BadInput("instrument.code_taken", f"There is already an instrument {code}.", field="code")
        instrument = Instrument.objects.create(code=code, name=name, serial=serial, registered_at=timezone.now())
        for accessory in accessories:
            Accessory.objects.create(instrument=instrument, **accessory)
        record(
            Event.INSTRUMENT_REGISTERED,
            by=by,
            subject=Subject("instrument", str(instrument.pk), instrument.code),
            facts={"name": name, "serial": serial, "accessories": [dict(accessory) for accessory in accessories]},
        )
    return instrument


def record_qualification(
    *, by: User, instrument_id: int, performed_on: date, due_on: date, occasion: str
) -> Qualification:
    permissions.require_method_owner(by)
    if due_on <= performed_on:
        raise BadInput("qualification.due", "The next one must be due later than this one.", field="due_on")
    with unit_of_work():
        instrument = Instrument.objects.select_for_update().filter(pk=instrument_id).first()
        if instrument is None:
            raise NotVisible("instrument.unknown", "There is no such instrument.")
        row = Qualification.objects.create(
            instrument=instrument, performed_on=performed_on, due_on=due_on, occasion=occasion, recorded_by=by
        )
        record(
            Event.INSTRUMENT_CHANGED,
            by=by,
            subject=Subject("instrument", str(instrument.pk), instrument.code),
            facts={
                "qualification": row.pk,
                "performed_on": performed_on.isoformat(),
                "due_on": due_on.isoformat(),
                "occasion": occasion,
            },
        )
    return row


def record_check(
    *,
    by: User,
    accessory_id: int,
    performed_at: datetime,
    valid_until: datetime,
    verdict: str,
    note: str = "",
    data: bytes | None = None,
) -> InstrumentCheck:
    """The outcome of a performance check as the laboratory judged it, with its spectrum's bytes where there are any."""
    if not (permissions.may_analyse(by) or permissions.may_own_methods(by)):
        permissions.require_analyst(by)
    if verdict not in CheckVerdict.values:
        raise BadInput("check.verdict", "Choose passed, failed or not evaluable.", field="verdict")
    if performed_at > timezone.now():
        raise BadInput("check.later", "The check lies in the future.", field="performed_at")
    if valid_until <= performed_at:
        raise BadInput("check.valid_until", "It must be valid beyond the moment it was made.", field="valid_until")
    note = bounded(note, field="note")
    sha256 = store.put(data) if data else ""
    with unit_of_work():
        accessory = Accessory.objects.select_related("instrument").filter(pk=accessory_id).first()
        if accessory is None:
            raise NotVisible("accessory.unknown", "There is no such accessory.")
        raw_file = None
        if data:
            raw_file, _ = RawFile.objects.get_or_create(
                sha256=sha256, defaults={"size_bytes": len(data), "stored_by": by, "stored_at": timezone.now()}
            )
        check = InstrumentCheck.objects.create(
            accessory=accessory,
            performed_at=performed_at,
            valid_until=valid_until,
            verdict=verdict,
            raw_file=raw_file,
            note=note,
            recorded_by=by,
            recorded_at=timezone.now(),
        )
        record(
            Event.INSTRUMENT_CHECK_RECORDED,
            by=by,
            subject=Subject("instrument", str(accessory.instrument_id), accessory.instrument.code),
            facts={
                "accessory": accessory.name,
                "performed_at": performed_at.isoformat(),
                "valid_until": valid_until.isoformat(),
                "verdict": verdict,
                "sha256": sha256,
            },
            reason=note,
        )
    return check


def record_competence(
    *,
    by: User,
    user_id: int,
    activity: str,
    valid_until: date,
    evidence: str,
    material_id: int | None = None,
    technique: str = "",
) -> Competence:
    permissions.require_approver(by)
    if activity not in Activity.values:
        raise BadInput("competence.activity", "Choose analyse or review.", field="activity")
    with unit_of_work():
        person = User.objects.filter(pk=user_id).first()
        if person is None:
            raise NotVisible("account.unknown", "There is no such account.")
        row = Competence.objects.create(
            user=person,
            activity=activity,
            material_id=material_id,
            technique=technique,
            valid_until=valid_until,
            evidence=evidence,
            recorded_by=by,
            recorded_at=timezone.now(),
        )
        record(
            Event.COMPETENCE_RECORDED,
            by=by,
            subject=Subject("account", str(person.pk), f"account {person.pk}"),
            facts={
                "activity": activity,
                "material": row.material.code if row.material else "all",
                "technique": technique or "all",
                "valid_until": valid_until.isoformat(),
                "evidence": evidence,
            },
        )
    return row
