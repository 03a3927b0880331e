"""Files, uploads and spectra: the bytes against their name, the rows against what the trail recorded of them."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator

from labsite.errors import DomainError
from labsite.trail import canonical
from labsite.trail.events import Event
from labsite.trail.verify import Damage
from spectra import store
from spectra.integrity.rows import Told, differing, each_row, settled, told
from spectra.models import Analysis, RawFile, Spectrum, SpectrumRole, Upload


def damaged_files() -> Iterator[Damage]:
    """Every raw file and every stored curve against its name."""
    for sha256, noun in _named_files():
        try:
            store.get(sha256)
        except (DomainError, OSError, ValueError, TypeError) as error:
            yield Damage(where=f"{noun} {sha256}", what=str(error))


def _named_files() -> Iterator[tuple[str, str]]:
    for sha256 in RawFile.objects.order_by("pk").values_list("sha256", flat=True).iterator():
        yield sha256, "raw file"
    curves = Analysis.objects.filter(state="done").exclude(curves_sha256="").order_by("pk")
    for sha256 in curves.values_list("curves_sha256", flat=True).iterator():
        yield sha256, "curves"


def damaged_evidence() -> Iterator[Damage]:
    """Every file and spectrum that the trail tells of, against its row, and every row against the trail."""
    yield from settled(_uploads)
    yield from settled(_spectra)


def _grouped(entries: Iterator[Told], *names: str) -> dict[tuple, list[Told]]:
    """The entries by their examination and the facts called `names`."""
    found = defaultdict(list)
    for entry in entries:
        found[(entry.subject_id, *(entry.facts.get(name) for name in names))].append(entry)
    return found


def _uploads() -> Iterator[Damage]:
    stored = _grouped(told(Event.RAW_FILE_STORED), "file", "sha256")
    answered = _grouped(told(Event.RAW_FILE_ANSWERED), "file", "sha256")
    several = {key for key, entries in stored.items() if len(entries) > 1}  # refused bytes may be brought in again

    def check(row: Upload) -> Iterator[Damage]:
        where = f"file {row.file_name} of {row.examination.code}"
        key = (str(row.examination_id), canonical.clean_text(row.file_name), row.raw_file.sha256)
        if not stored[key]:
            yield Damage(where, "No entry of the trail says that it was brought in.")
            return
        entry = stored[key].pop(0)
        if row.raw_file.size_bytes != entry.facts.get("size_bytes"):
            yield Damage(where, f"Its size is not the one that entry {entry.seq} recorded.")
        given = [entry.new.get("answers") for entry in answered[key]]
        lawful = [{}, *given] if key in several else (given[-1:] or [{}])
        if canonical.plain(row.answers) not in lawful:
            yield Damage(where, "Its answers are not the ones that the trail recorded.")

    yield from each_row(Upload.objects.select_related("examination", "raw_file"), "upload", check)
    for entry in (entry for left in stored.values() for entry in left):
        yield Damage(
            f"file {entry.facts.get('file')} of {entry.subject_label}",
            f"Entry {entry.seq} says that it was brought in (SHA-256 {entry.facts.get('sha256')}); it is gone.",
        )


def _spectra() -> Iterator[Damage]:
    read = _grouped(told(Event.SPECTRUM_READ), "file", "sha256", "block")
    roles = _grouped(told(Event.SPECTRUM_EXCLUDED, Event.SPECTRUM_ROLE_CHANGED), "file", "block")

    def check(row: Spectrum) -> Iterator[Damage]:
        file, sha256 = canonical.clean_text(row.upload.file_name), row.upload.raw_file.sha256
        where = f"spectrum {row.block_index + 1} of {row.upload.file_name}, {row.examination.code}"
        entries = read[(str(row.examination_id), file, sha256, row.block_index)]
        if not entries:
            yield Damage(where, "No entry of the trail says that it was read.")
            return
        entry = entries.pop(0)
        if names := differing(entry.facts, _facts(row)):
            yield Damage(where, f"It differs from what entry {entry.seq} recorded: {names}.")
        if row.upload.examination_id != row.examination_id:
            yield Damage(where, "Its file belongs to another examination.")
        role, reason = entry.facts.get("role"), ""
        for change in roles[(str(row.examination_id), file, row.block_index)]:
            if change.facts.get("sha256", sha256) == sha256:
                role = change.new.get("role")
                reason = change.reason if role == SpectrumRole.EXCLUDED else ""
        if (row.role, canonical.clean_text(row.excluded_reason)) != (role, reason):
            yield Damage(where, "Its role, or the reason for its exclusion, is not the one that the trail recorded.")

    rows = Spectrum.objects.select_related("examination", "upload__raw_file", "accessory__instrument")
    yield from each_row(rows, "spectrum", check)
    for entry in (entry for left in read.values() for entry in left):
        yield Damage(
            f"spectrum {entry.facts.get('block', 0) + 1} of {entry.facts.get('file')}, {entry.subject_label}",
            f"Entry {entry.seq} says that it was read; it is gone.",
        )


def _facts(row: Spectrum) -> dict[str, object]:
    return {
        "technique": row.technique,
        "accessory": str(row.accessory) if row.accessory else "",
        "points": row.points,
        "range_cm1": [f"{row.first_cm1:.3f}", f"{row.last_cm1:.3f}"],
        "ordinate": row.ordinate_used,
        "arrays_sha256": row.arrays_sha256,
        "findings": [finding["code"] for finding in row.reading_findings],
    }
