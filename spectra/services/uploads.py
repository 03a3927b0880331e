"""A file is brought to an examination: stored by content, read strictly, each block a spectrum, then analysed.

The bytes are kept whatever the reader says of them; a refused file keeps its reason beside them. Reading happens
outside the transaction, which is short.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from pathlib import PurePosixPath, PureWindowsPath

from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import BadInput, NotPossible, NotVisible
from labsite.trail.events import Event
from labsite.trail.record import record, unit_of_work
from spectra import arrays, hooks, permissions, selectors, store
from spectra.core import formats
from spectra.core.types import ReadResult, RefusedBlock, SpectrumBlock
from spectra.models import (
    ContributionKind,
    Examination,
    RawFile,
    Spectrum,
    SpectrumRole,
    Upload,
    UploadState,
)
from spectra.reading import read_options
from spectra.services.analyses import queue_analysis
from spectra.services.locking import locked_examination
from spectra.services.receiving import contribute
from spectra.services.texts import bounded
from spectra.subjects import examination_subject

# The roles whose spectra show the sample; a background or a blank is kept and looked at, not interpreted.
READ_ROLES = (SpectrumRole.DECISIVE, SpectrumRole.REPLICATE, SpectrumRole.REPEAT)


@dataclass(frozen=True)
class MeasurementFacts:
    """What is recorded beside a file. Empty values are filled from the procedure, or stay unknown."""

    technique: str = ""
    accessory_id: int | None = None
    role: str = ""
    prepared_by_id: int | None = None
    measured_by_id: int | None = None
    measured_at_text: str = ""
    resolution_cm1: float | None = None
    scans: int | None = None
    already_processed: str = ""
    background_note: str = ""


def clean_file_name(name: str) -> str:
    """The last part of what the browser sent, without control characters; never used as a path."""
    last = PurePosixPath(PureWindowsPath(name).name).name
    cleaned = "".join(character for character in last if character.isprintable()).strip()
    return cleaned[:255] if cleaned.strip(".") else "unnamed"


ROLES_AT_UPLOAD = frozenset(SpectrumRole.values) - {SpectrumRole.EXCLUDED}


def _judge_facts(facts: MeasurementFacts) -> None:
    """Refuse what no measurement can have, before anything is stored."""
    if facts.role and facts.role not in ROLES_AT_UPLOAD:
        raise BadInput("spectrum.role", "That is not a role a new spectrum can have.", field="role")
    for field in ("prepared_by", "measured_by"):
        person = getattr(facts, f"{field}_id")
        if person is not None and not User.objects.filter(pk=person).exists():
            raise BadInput("spectrum.unknown_person", "There is no such account.", field=field)
    if facts.resolution_cm1 is not None and not 0 < facts.resolution_cm1 < 1000:
        raise BadInput("spectrum.resolution", "Give the resolution in cm⁻¹, above 0.", field="resolution_cm1")
    bounded(facts.background_note, field="background_note", longest=_longest("background_note"))
    bounded(facts.already_processed, field="already_processed", longest=_longest("already_processed"))
    bounded(facts.measured_at_text, field="measured_at_text", longest=_longest("measured_at_text"))
    if facts.scans is not None and not 0 < facts.scans <= 1_000_000:
        raise BadInput("spectrum.scans", "Give the number of scans, 1 or more.", field="scans")


def _longest(column: str) -> int:
    return Spectrum._meta.get_field(column).max_length


def _judge_role(examination: Examination, role: str) -> None:
    if role == SpectrumRole.DECISIVE and _is_decided(examination):
        raise NotPossible(
            "spectrum.decisive_there",
            "This examination has its decisive spectrum already.",
            remedy="Bring the file in as a replicate, then make it decisive and say why.",
            field="role",
        )


def bring_file(*, examination_id: int, by: User, file_name: str, data: bytes, facts: MeasurementFacts) -> Upload:
    """Store and read one file. Returns the upload: read, needing an answer, or refused with its reason."""
    permissions.require_analyst(by)
    _judge_facts(facts)
    examination = Examination.objects.select_related("procedure").filter(pk=examination_id).first()
    if examination is None:
        raise NotVisible("examination.unknown", "There is no such examination.")
    hooks.evidence_may_change(examination, by)
    technique = facts.technique or examination.procedure.technique
    name = clean_file_name(file_name)
    result = formats.read(data, read_options({}, technique))
    sha256 = store.put(data)
    with unit_of_work():
        examination = locked_examination(examination_id)
        hooks.evidence_may_change(examination, by)
        _judge_role(examination, facts.role)
        known = Upload.objects.filter(examination=examination, raw_file__sha256=sha256)
        if known.exclude(state=UploadState.REFUSED).exists():
            raise NotPossible(
                "upload.same_bytes",
                f"{name} holds the same bytes as a file that this examination already has.",
                remedy="Bring in the other measurement, or go on with the one that is there.",
                field="files",
            )
        raw_file, fresh = RawFile.objects.get_or_create(
            sha256=sha256, defaults={"size_bytes": len(data), "stored_by": by, "stored_at": timezone.now()}
        )
        upload = Upload.objects.create(
            examination=examination,
            raw_file=raw_file,
            file_name=name,
            state=UploadState.REFUSED,
            facts=asdict(facts),
            uploaded_by=by,
            uploaded_at=timezone.now(),
        )
        record(
            Event.RAW_FILE_STORED,
            by=by,
            subject=examination_subject(examination),
            facts={"file": name, "sha256": sha256, "size_bytes": len(data), "already_in_store": not fresh},
        )
        contribute(examination=examination, user=by, kind=ContributionKind.UPLOADED)
        _take_in(upload=upload, result=result, by=by, facts=facts, technique=technique)
    return upload


def answer_upload(*, upload_id: int, by: User, answers: Mapping[str, object], facts: MeasurementFacts) -> Upload:
    """Read the stored bytes again with a person's answer to what the file leaves open.

    What was stated when the file was brought still holds; `facts` adds to it or corrects it.
    """
    permissions.require_analyst(by)
    upload = Upload.objects.select_related("examination__procedure", "raw_file").filter(pk=upload_id).first()
    if upload is None:
        raise NotVisible("upload.unknown", "There is no such file.")
    stated = {name: value for name, value in asdict(facts).items() if value not in ("", None)}
    facts = MeasurementFacts(**upload.facts | stated)
    _judge_facts(facts)
    technique = facts.technique or upload.examination.procedure.technique
    told = {**upload.answers, **{key: value for key, value in answers.items() if value}}
    result = formats.read(store.get(upload.raw_file.sha256), read_options(told, technique))
    with unit_of_work():
        examination = locked_examination(upload.examination_id)
        upload = Upload.objects.select_for_update().get(pk=upload_id)
        hooks.evidence_may_change(examination, by)
        if upload.state != UploadState.NEEDS_ANSWER:
            raise NotPossible("upload.not_waiting", "This file does not wait for an answer any more.")
        _judge_role(examination, facts.role)
        record(
            Event.RAW_FILE_ANSWERED,
            by=by,
            subject=examination_subject(examination),
            facts={"file": upload.file_name, "question": upload.question, "sha256": upload.raw_file.sha256},
            old={"answers": upload.answers},
            new={"answers": told},
        )
        upload.answers, upload.facts = told, asdict(facts)
        contribute(examination=examination, user=by, kind=ContributionKind.UPLOADED)
        _take_in(upload=upload, result=result, by=by, facts=facts, technique=technique)
    return upload


def _take_in(*, upload: Upload, result: ReadResult, by: User, facts: MeasurementFacts, technique: str) -> None:
    """Settle the upload's state from what the reader found, and make a spectrum of every block that was read."""
    blocks = [block for block in result.blocks if isinstance(block, SpectrumBlock)]
    refused = [block for block in result.blocks if isinstance(block, RefusedBlock)]
    problem = result.problem or (refused[0].problem if refused and not blocks else None)
    waiting = next((block.problem for block in refused if block.problem.question), None)
    if waiting is not None and not blocks:
        problem = waiting
    upload.problem_code = problem.code if problem else ""
    upload.problem_text = problem.message if problem else ""
    upload.problem_line = problem.line if problem else None
    upload.problem_remedy = problem.remedy if problem else ""
    upload.question = (problem.question or "") if problem else ""
    if problem:
        upload.state = UploadState.NEEDS_ANSWER if problem.question else UploadState.REFUSED
    else:
        upload.state = UploadState.READ
        if refused:
            upload.problem_text = " ".join(f"Block {block.index + 1}: {block.problem.message}" for block in refused)
    upload.save()
    if problem and not problem.question:
        record(
            Event.RAW_FILE_REFUSED,
            by=by,
            subject=examination_subject(upload.examination),
            facts={"file": upload.file_name, "sha256": upload.raw_file.sha256, "code": problem.code},
            reason=problem.message,
        )
    for block in blocks:
        _make_spectrum(upload=upload, block=block, by=by, facts=facts, technique=technique)


def _make_spectrum(
    *, upload: Upload, block: SpectrumBlock, by: User, facts: MeasurementFacts, technique: str
) -> Spectrum:
    examination = upload.examination
    procedure = examination.procedure
    accessory = selectors.accessory_for(technique, facts.accessory_id)
    role = _role_for(examination, facts.role)
    spectrum = Spectrum.objects.create(
        examination=examination,
        upload=upload,
        block_index=block.index,
        title=block.title[:300],
        role=role,
        technique=technique,
        accessory=accessory,
        atr_crystal_index=accessory.atr_crystal_index if accessory else procedure.atr_crystal_index,
        atr_angle_deg=accessory.atr_angle_deg if accessory else procedure.atr_angle_deg,
        atr_reflections=accessory.atr_reflections if accessory else procedure.atr_reflections,
        resolution_cm1=facts.resolution_cm1 or declared_resolution_cm1(block) or procedure.resolution_cm1,
        scans=facts.scans or procedure.scans,
        background_note=facts.background_note[:200],
        already_processed=(facts.already_processed or block.headers.get("DATAPROCESSING", ""))[:300],
        prepared_by_id=facts.prepared_by_id or by.pk,
        measured_by_id=facts.measured_by_id or by.pk,
        measured_at_text=(facts.measured_at_text or _measured_at(block))[:80],
        ordinate_used=str(block.ordinate_used),
        ordinate_declared=block.ordinate_declared[:80],
        axis_unit_declared=block.axis_unit_declared[:40],
        coding=block.coding,
        self_checking=block.self_checking,
        points=len(block.x_cm1),
        first_cm1=float(block.x_cm1[0]),
        last_cm1=float(block.x_cm1[-1]),
        arrays_sha256=arrays.block_digest(block),
        reading_findings=[finding_json(finding) for finding in block.findings],
        created_at=timezone.now(),
    )
    contribute(examination=examination, user=spectrum.prepared_by, kind=ContributionKind.PREPARED)
    contribute(examination=examination, user=spectrum.measured_by, kind=ContributionKind.MEASURED)
    record(
        Event.SPECTRUM_READ,
        by=by,
        subject=examination_subject(examination),
        facts={
            "file": upload.file_name,
            "sha256": upload.raw_file.sha256,
            "block": block.index,
            "role": role,
            "technique": technique,
            "accessory": str(accessory) if accessory else "",
            "points": spectrum.points,
            "range_cm1": [f"{spectrum.first_cm1:.3f}", f"{spectrum.last_cm1:.3f}"],
            "ordinate": spectrum.ordinate_used,
            "arrays_sha256": spectrum.arrays_sha256,
            "findings": [finding.code for finding in block.findings],
        },
    )
    if role in READ_ROLES:
        queue_analysis(spectrum=spectrum, by=by)
    return spectrum


def _role_for(examination: Examination, wanted: str) -> str:
    """The first spectrum of an examination decides; what comes later is a replicate until somebody says otherwise."""
    if wanted and wanted != SpectrumRole.DECISIVE:
        return wanted
    return SpectrumRole.REPLICATE if _is_decided(examination) else SpectrumRole.DECISIVE


def _is_decided(examination: Examination) -> bool:
    return examination.spectra.filter(role=SpectrumRole.DECISIVE).exists()


def finding_json(finding) -> dict[str, object]:
    """A reading finding as it is kept in the row."""
    return {
        "code": finding.code,
        "severity": str(finding.severity),
        "message": finding.message,
        "line": finding.line,
        "remedy": finding.remedy,
        "region_cm1": list(finding.region_cm1) if finding.region_cm1 else None,
    }


# Common practice: high-resolution gas work ends near 0.01 cm-1, and nothing coarser than 64 cm-1 shows a band.
LOWEST_RESOLUTION_CM1, HIGHEST_RESOLUTION_CM1 = 0.01, 64.0


def declared_resolution_cm1(block: SpectrumBlock) -> float | None:
    """RESOLUTION of the file's header, when it is a number that a resolution of mid-infrared spectra can be."""
    try:
        value = float(block.headers.get("RESOLUTION", "").split()[0])
    except (ValueError, IndexError):
        return None
    return value if LOWEST_RESOLUTION_CM1 <= value <= HIGHEST_RESOLUTION_CM1 else None


def _measured_at(block: SpectrumBlock) -> str:
    """What the file says of its own time, as it is written there: the instrument's clock is not ours to correct."""
    if block.headers.get("LONGDATE"):
        return block.headers["LONGDATE"]
    return " ".join(part for part in (block.headers.get("DATE", ""), block.headers.get("TIME", "")) if part)


def change_role(*, spectrum_id: int, by: User, role: str, reason: str) -> Spectrum:
    """Exclude a spectrum, take it in again, or make another one decisive; always with a reason, always visible."""
    permissions.require_analyst(by)
    reason = bounded(reason, field="reason")
    if role not in SpectrumRole.values:
        raise BadInput("spectrum.role", "That is not a role a spectrum can have.", field="role")
    if not reason:
        raise BadInput("spectrum.no_reason", "Say why: the reason stays with the spectrum.", field="reason")
    with unit_of_work():
        spectrum = Spectrum.objects.select_related("upload", "examination").filter(pk=spectrum_id).first()
        if spectrum is None:
            raise NotVisible("spectrum.unknown", "There is no such spectrum.")
        examination = locked_examination(spectrum.examination_id)
        spectrum = Spectrum.objects.select_for_update().get(pk=spectrum_id)
        hooks.evidence_may_change(examination, by)
        old = spectrum.role
        if old == role:
            raise NotPossible("spectrum.same_role", f"This spectrum is already {spectrum.get_role_display()}.")
        if role == SpectrumRole.DECISIVE:
            for other in examination.spectra.select_for_update().filter(role=SpectrumRole.DECISIVE):
                other.role = SpectrumRole.REPLICATE
                other.save(update_fields=["role"])
                _record_role(other, by, SpectrumRole.DECISIVE, "another spectrum was made decisive: " + reason)
        if role == SpectrumRole.EXCLUDED:
            spectrum.role_before_exclusion, spectrum.excluded_reason = old, reason
            contribute(examination=examination, user=by, kind=ContributionKind.EXCLUDED)
        else:
            spectrum.excluded_reason = ""
            contribute(examination=examination, user=by, kind=ContributionKind.CHANGED_ROLE)
        spectrum.role = role
        spectrum.save(update_fields=["role", "role_before_exclusion", "excluded_reason"])
        _record_role(spectrum, by, old, reason)
        # A decisive one is analysed anew with the versions in force today, and its claims are drafted from that.
        if role == SpectrumRole.DECISIVE or (role in READ_ROLES and not spectrum.analyses.exists()):
            queue_analysis(spectrum=spectrum, by=by)
    return spectrum


def _record_role(spectrum: Spectrum, by: User, old: str, reason: str) -> None:
    event = Event.SPECTRUM_EXCLUDED if spectrum.role == SpectrumRole.EXCLUDED else Event.SPECTRUM_ROLE_CHANGED
    record(
        event,
        by=by,
        subject=examination_subject(spectrum.examination),
        facts={
            "file": spectrum.upload.file_name,
            "sha256": spectrum.upload.raw_file.sha256,
            "block": spectrum.block_index,
        },
        old={"role": old},
        new={"role": spectrum.role},
        reason=reason,
    )
