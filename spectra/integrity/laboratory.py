"""What was received and what was checked: deliveries, samples, examinations and instrument checks against the trail."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from datetime import datetime

from labsite.trail import canonical
from labsite.trail.events import Event
from labsite.trail.verify import Damage
from spectra.integrity.rows import against_the_trail, each_row, settled, told
from spectra.models import Delivery, Examination, InstrumentCheck, Sample


def damaged_laboratory() -> Iterator[Damage]:
    yield from settled(_received)
    yield from settled(_checks)


def _received() -> Iterator[Damage]:
    deliveries = Delivery.objects.select_related("material_version__material").prefetch_related("containers")
    yield from against_the_trail(deliveries, "delivery", Event.DELIVERY_REGISTERED, _delivery)
    samples = Sample.objects.select_related("delivery").prefetch_related("containers")
    yield from against_the_trail(samples, "sample", Event.SAMPLE_REGISTERED, _sample)
    examinations = Examination.objects.select_related("delivery", "procedure").prefetch_related("samples")
    yield from against_the_trail(examinations, "examination", Event.EXAMINATION_OPENED, _examination)


def _delivery(row: Delivery) -> dict[str, object]:
    numbers = [container.number for container in row.containers.all()]
    return {
        "material": row.material_version.material.code,
        "material_version": row.material_version.number,
        "declared": row.material_version.name,
        "supplier": row.supplier,
        "lot": row.lot,
        "received_on": row.received_on,
        "due_on": row.due_on or "",
        # A container that is missing or too many shows in the total as well.
        "containers_total": row.containers_total if numbers == [*range(1, row.containers_total + 1)] else numbers,
    }


def _sample(row: Sample) -> dict[str, object]:
    strangers = [container for container in row.containers.all() if container.delivery_id != row.delivery_id]
    return {
        "delivery": row.delivery.code,
        "lot": row.delivery.lot,
        "containers": [] if strangers else sorted(container.number for container in row.containers.all()),
        "kind": row.kind,
        "appearance": row.form,
    }


def _examination(row: Examination) -> dict[str, object]:
    return {
        "samples": [sample.code for sample in sorted(row.samples.all(), key=lambda sample: sample.pk)],
        "delivery": row.delivery.code,
        "procedure": row.procedure.number,
        "edition": row.procedure.edition,
    }


def _checks() -> Iterator[Damage]:
    """Each instrument check against its entry; two checks with all the same facts are two entries."""
    entries = list(told(Event.INSTRUMENT_CHECK_RECORDED))
    promised = Counter(
        (
            entry.subject_id,
            entry.facts.get("accessory"),
            _moment(entry.facts.get("performed_at")),
            _moment(entry.facts.get("valid_until")),
            entry.facts.get("verdict"),
            entry.facts.get("sha256"),
            entry.reason,
            entry.actor_id,
        )
        for entry in entries
    )

    def check(row: InstrumentCheck) -> Iterator[Damage]:
        key = (
            str(row.accessory.instrument_id),
            canonical.clean_text(row.accessory.name),
            row.performed_at,
            row.valid_until,
            row.verdict,
            row.raw_file.sha256 if row.raw_file else "",
            canonical.clean_text(row.note),
            row.recorded_by_id,
        )
        if promised[key] < 1:
            yield Damage(
                f"instrument check {row.pk} of {row.accessory}", "No entry of the trail tells of it as it stands here."
            )
        promised[key] -= 1

    rows = InstrumentCheck.objects.select_related("accessory__instrument", "raw_file")
    yield from each_row(rows, "instrument check", check)
    for key, left in promised.items():
        if left > 0:
            yield Damage(
                f"instrument check of {key[1]}, performed {key[2]:%Y-%m-%d %H:%M} UTC",
                "The trail tells of it; it is gone, or was changed.",
            )


def _moment(text: object) -> datetime:
    return datetime.fromisoformat(str(text))
