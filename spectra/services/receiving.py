"""What arrives is registered: delivery, containers, samples, and the examination that each sample begins."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date

from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import BadInput, NotPossible, NotVisible
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work
from spectra import days, permissions, selectors
from spectra.models import (
    ApprovalState,
    Container,
    Contribution,
    Delivery,
    Examination,
    MaterialVersion,
    Priority,
    Sample,
    SampleKind,
)
from spectra.services.numbering import next_code
from spectra.subjects import examination_subject

MAX_CONTAINERS = 500


def register_delivery(
    *,
    by: User,
    material_version_id: int,
    supplier: str,
    lot: str,
    received_on: date,
    due_on: date | None = None,
    priority: int = Priority.NORMAL,
    containers_total: int = 1,
    sampled_containers: Sequence[int] = (1,),
    composite: bool = False,
    form: str = "",
    sampling_note: str = "",
) -> Delivery:
    """One delivery with its containers, a sample for each sampled one (or one composite), each with an examination."""
    permissions.require_analyst(by)
    supplier, lot = supplier.strip(), lot.strip()
    numbers = sorted(set(sampled_containers))
    _judge_delivery(supplier, lot, received_on, due_on, priority, containers_total, numbers)
    with unit_of_work():
        version = MaterialVersion.objects.select_related("material").filter(pk=material_version_id).first()
        if version is None:
            raise NotVisible("material.unknown", "There is no such material.")
        if version.state != ApprovalState.APPROVED:
            raise NotPossible(
                "material.not_approved",
                f"{version.name}, version {version.number}, is not approved, so nothing can be received against it.",
                remedy="Choose the approved version, or ask QA to approve this one.",
            )
        now = timezone.now()
        delivery = Delivery.objects.create(
            code=next_code("D"),
            material_version=version,
            supplier=supplier,
            lot=lot,
            received_on=received_on,
            due_on=due_on,
            priority=priority,
            containers_total=containers_total,
            containers_sampled=len(numbers),
            sampling_note=sampling_note.strip(),
            registered_by=by,
            registered_at=now,
        )
        record(
            Event.DELIVERY_REGISTERED,
            by=by,
            subject=Subject("delivery", str(delivery.pk), delivery.code),
            facts={
                "material": version.material.code,
                "material_version": version.number,
                "declared": version.name,
                "supplier": supplier,
                "lot": lot,
                "received_on": received_on.isoformat(),
                "due_on": due_on.isoformat() if due_on else "",
                "containers_total": containers_total,
                "sampled_containers": numbers,
                "sampling": "composite" if composite else "individual",
            },
        )
        containers = {
            number: Container.objects.create(delivery=delivery, number=number)
            for number in range(1, containers_total + 1)
        }
        groups = [numbers] if composite else [[number] for number in numbers]
        for group in groups:
            kind = SampleKind.COMPOSITE if composite else SampleKind.INDIVIDUAL
            _register_sample(
                by=by, delivery=delivery, containers=[containers[number] for number in group], kind=kind, form=form
            )
    return delivery


def _judge_delivery(
    supplier: str,
    lot: str,
    received_on: date,
    due_on: date | None,
    priority: int,
    total: int,
    numbers: Sequence[int],
) -> None:
    if not supplier:
        raise BadInput("delivery.no_supplier", "Who supplied it?", field="supplier")
    if not lot:
        raise BadInput("delivery.no_lot", "Which lot is it? Copy it from the label.", field="lot")
    for field, text in (("supplier", supplier), ("lot", lot)):
        longest = Delivery._meta.get_field(field).max_length
        if len(text) > longest:
            raise BadInput("delivery.too_long", f"That is longer than {longest} characters.", field=field)
    if priority not in Priority.values:
        raise BadInput("delivery.priority", "Choose urgent, normal or low.", field="priority")
    if received_on > days.today():
        raise BadInput("delivery.received_later", "The day of receipt lies in the future.", field="received_on")
    if due_on and due_on < received_on:
        raise BadInput("delivery.due_before_receipt", "It cannot be due before it was received.", field="due_on")
    if not 1 <= total <= MAX_CONTAINERS:
        raise BadInput(
            "delivery.containers", f"Give the number of containers, 1 to {MAX_CONTAINERS}.", field="containers_total"
        )
    if not numbers or numbers[0] < 1 or numbers[-1] > total:
        raise BadInput(
            "delivery.sampled_containers",
            f"Name the sampled containers by number, from 1 to {total}.",
            field="sampled_containers",
        )


def _register_sample(*, by: User, delivery: Delivery, containers: Sequence[Container], kind: str, form: str) -> Sample:
    sample = Sample.objects.create(
        code=next_code("S"),
        delivery=delivery,
        kind=kind,
        form=form.strip(),
        registered_by=by,
        registered_at=timezone.now(),
    )
    sample.containers.set(containers)
    record(
        Event.SAMPLE_REGISTERED,
        by=by,
        subject=Subject("sample", str(sample.pk), sample.code),
        facts={
            "delivery": delivery.code,
            "lot": delivery.lot,
            "containers": [container.number for container in containers],
            "kind": kind,
            "appearance": form.strip(),
        },
    )
    _open_examination(by=by, delivery=delivery, samples=[sample])
    return sample


def _open_examination(*, by: User, delivery: Delivery, samples: Sequence[Sample]) -> Examination:
    procedure = selectors.effective_procedure(delivery.material_version.procedure_number, on=days.today())
    if procedure is None:
        raise NotPossible(
            "procedure.none_effective",
            f"No approved edition of procedure {delivery.material_version.procedure_number} is in force today.",
            remedy="Ask a method owner for an approved edition, then register the delivery again.",
        )
    examination = Examination.objects.create(
        code=next_code("E"), delivery=delivery, procedure=procedure, opened_by=by, opened_at=timezone.now()
    )
    examination.samples.set(samples)
    record(
        Event.EXAMINATION_OPENED,
        by=by,
        subject=examination_subject(examination),
        facts={
            "samples": [sample.code for sample in samples],
            "delivery": delivery.code,
            "procedure": procedure.number,
            "edition": procedure.edition,
        },
    )
    return examination


def contribute(*, examination: Examination, user: User | None, kind: str) -> None:
    """Note that the examination is now also the own work of `user`. Call it inside a unit of work."""
    if user is not None:
        Contribution.objects.get_or_create(
            examination=examination, user=user, kind=kind, defaults={"at": timezone.now()}
        )
