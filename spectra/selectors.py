"""Reads of the spectra layer. Nothing here writes; lists come with what their pages show: no page asks row by row."""

from __future__ import annotations

import json
from dataclasses import dataclass
from datetime import date, datetime, timedelta

from django.db.models import Exists, Model, OuterRef, Prefetch, Q, QuerySet
from django.utils import timezone

from labsite.errors import BadInput, NotPossible, NotVisible
from spectra.models import (
    Accessory,
    Analysis,
    AnalysisState,
    ApprovalState,
    CheckVerdict,
    Delivery,
    Examination,
    GroupTable,
    Instrument,
    InstrumentCheck,
    Material,
    MaterialVersion,
    MethodVersion,
    Procedure,
    Reference,
    Sample,
    Spectrum,
    SpectrumRole,
    Upload,
    WatchItem,
    WatchList,
)


def effective_procedure(number: str, *, on: date) -> Procedure | None:
    """The approved edition of a procedure that is in force on a day: the latest one effective by then."""
    return (
        Procedure.objects.filter(number=number, state=ApprovalState.APPROVED, effective_from__lte=on)
        .order_by("-effective_from", "-edition")
        .first()
    )


def current_group_table() -> GroupTable:
    table = GroupTable.objects.filter(state=ApprovalState.APPROVED).order_by("-number").first()
    if table is None:
        raise NotPossible(
            "group_table.none_approved",
            "No version of the group table is approved, so nothing can be analysed.",
            remedy="Load and approve one: python3 manage.py load_group_table, then approve it on its page.",
        )
    return table


def reference_for(material: Material, *, technique: str, phase: str) -> Reference | None:
    """The approved reference of a material, one of the same technique and phase before any other, the newest first."""
    approved = Reference.objects.filter(
        material=material, state=ApprovalState.APPROVED, superseded_by__isnull=True
    ).order_by("-approved_at", "-pk")
    return approved.filter(technique=technique, phase=phase).first() or approved.first()


def accessory_for(technique: str, accessory_id: int | None) -> Accessory | None:
    """The accessory a spectrum was measured on: the one named, or the only one in service for the technique."""
    in_service = Accessory.objects.select_related("instrument").filter(instrument__in_service=True)
    if accessory_id is not None:
        accessory = in_service.filter(pk=accessory_id).first()
        if accessory is None:
            raise BadInput(
                "accessory.unknown", "That accessory does not exist or is out of service.", field="accessory"
            )
        if accessory.technique != technique:
            raise BadInput(
                "accessory.other_technique",
                f"{accessory.name} measures by {accessory.get_technique_display()}, which is not the chosen technique.",
                field="accessory",
            )
        return accessory
    fitting = list(in_service.filter(technique=technique)[:2])
    return fitting[0] if len(fitting) == 1 else None


def check_in_force(accessory: Accessory | None, *, at: datetime) -> InstrumentCheck | None:
    """The accessory's last instrument check before `at`, whatever it says; None when there never was one."""
    if accessory is None:
        return None
    return accessory.checks.filter(performed_at__lte=at).order_by("-performed_at").first()


def check_is_valid(check: InstrumentCheck | None, *, at: datetime) -> bool:
    return check is not None and check.verdict == CheckVerdict.PASSED and check.valid_until >= at


def analysis_with_inputs(analysis_id: int) -> Analysis:
    return (
        Analysis.objects.select_related(
            "spectrum__upload__raw_file",
            "spectrum__examination",
            "method",
            "group_table",
            "material_version__material",
            "reference__raw_file",
            "watch_list",
        )
        .prefetch_related(Prefetch("watch_list__items", WatchItem.objects.select_related("reference__raw_file")))
        .get(pk=analysis_id)
    )


def result_of(analysis: Analysis) -> dict:
    """The stored result as it was computed. Empty while there is none."""
    return json.loads(bytes(analysis.result)) if analysis.result is not None else {}


def latest_analysis(spectrum: Spectrum) -> Analysis | None:
    return spectrum.analyses.select_related("method", "group_table", "reference").order_by("-pk").first()


def decisive_spectrum(examination: Examination) -> Spectrum | None:
    return (
        examination.spectra.select_related("upload__raw_file", "accessory__instrument")
        .filter(role=SpectrumRole.DECISIVE)
        .first()
    )


def materials() -> QuerySet[Material]:
    return Material.objects.prefetch_related(
        Prefetch("versions", MaterialVersion.objects.select_related("author", "approved_by").order_by("-number")),
        Prefetch("references", Reference.objects.order_by("code")),
    ).order_by("code")


def approved_material_versions() -> QuerySet[MaterialVersion]:
    return (
        MaterialVersion.objects.filter(state=ApprovalState.APPROVED)
        .select_related("material")
        .order_by("name", "number")
    )


def material_version(pk: int) -> MaterialVersion:
    found = MaterialVersion.objects.select_related("material", "author", "approved_by", "watch_list", "approval")
    version = found.filter(pk=pk).first()
    if version is None:
        raise NotVisible("material.unknown", "There is no such material.")
    return version


def last_delivery_of(material_version: MaterialVersion) -> Delivery | None:
    """The last delivery of the same material: its supplier and numbers are the defaults of the next."""
    return (
        Delivery.objects.filter(material_version__material=material_version.material)
        .order_by("-registered_at", "-pk")
        .first()
    )


def delivery(pk: int) -> Delivery:
    found = (
        Delivery.objects.select_related("material_version__material", "registered_by")
        .prefetch_related("containers", "samples__containers", "samples__examinations__procedure")
        .filter(pk=pk)
        .first()
    )
    if found is None:
        raise NotVisible("delivery.unknown", "There is no such delivery.")
    return found


def sample(pk: int) -> Sample:
    found = (
        Sample.objects.select_related("delivery__material_version__material", "registered_by")
        .prefetch_related("containers", "examinations__procedure")
        .filter(pk=pk)
        .first()
    )
    if found is None:
        raise NotVisible("sample.unknown", "There is no such sample.")
    return found


def find_samples(*, text: str = "", before_pk: int | None = None, limit: int = 50) -> list[Sample]:
    """Samples whose number, lot, supplier or declared name contains each of the words; newest first, keyset pages."""
    rows = Sample.objects.select_related("delivery__material_version__material").prefetch_related(
        "examinations", "containers"
    )
    for word in text.split():
        rows = rows.filter(
            Q(code__icontains=word)
            | Q(delivery__lot__icontains=word)
            | Q(delivery__code__icontains=word)
            | Q(delivery__supplier__icontains=word)
            | Q(delivery__material_version__name__icontains=word)
        )
    if before_pk is not None:
        rows = rows.filter(pk__lt=before_pk)
    return list(rows.order_by("-pk")[:limit])


def earlier_examinations(examination: Examination) -> QuerySet[Examination]:
    """The same lot of the same material, examined before."""
    delivery = examination.delivery
    return (
        Examination.objects.filter(
            delivery__lot=delivery.lot, delivery__material_version__material=delivery.material_version.material
        )
        .exclude(pk=examination.pk)
        .order_by("-pk")
    )


def same_bytes_elsewhere(spectrum: Spectrum) -> list[Examination]:
    """Other examinations into which the file of this spectrum was brought too."""
    return list(
        Examination.objects.filter(uploads__raw_file=spectrum.upload.raw_file_id, uploads__state="read")
        .exclude(pk=spectrum.examination_id)
        .distinct()
        .prefetch_related("samples")
        .order_by("pk")[:10]
    )


def spectra_of(examination: Examination) -> QuerySet[Spectrum]:
    return examination.spectra.select_related(
        "upload__raw_file", "accessory__instrument", "prepared_by", "measured_by"
    ).prefetch_related(Prefetch("analyses", Analysis.objects.order_by("-pk").defer("result")))


def unread_uploads(examination: Examination) -> QuerySet[Upload]:
    return examination.uploads.select_related("raw_file", "uploaded_by").exclude(state="read")


def spectrum(pk: int) -> Spectrum:
    found = Spectrum.objects.select_related(
        "upload__raw_file", "examination__delivery__material_version__material", "accessory__instrument"
    ).filter(pk=pk)
    row = found.first()
    if row is None:
        raise NotVisible("spectrum.unknown", "There is no such spectrum.")
    return row


def analysis(pk: int) -> Analysis:
    row = (
        Analysis.objects.select_related(
            "spectrum__examination", "spectrum__upload__raw_file", "method", "group_table", "reference"
        )
        .filter(pk=pk)
        .first()
    )
    if row is None:
        raise NotVisible("analysis.unknown", "There is no such analysis.")
    return row


def unfinished_analyses() -> QuerySet[Analysis]:
    return Analysis.objects.filter(state__in=[AnalysisState.QUEUED, AnalysisState.RUNNING])


def references() -> QuerySet[Reference]:
    return Reference.objects.select_related("material", "author", "approved_by", "raw_file", "instrument").order_by(
        "code"
    )


def reference(pk: int) -> Reference:
    row = references().filter(pk=pk).first()
    if row is None:
        raise NotVisible("reference.unknown", "There is no such reference.")
    return row


def procedures() -> QuerySet[Procedure]:
    return Procedure.objects.select_related("author", "approved_by", "method").order_by("number", "-edition")


def procedure(pk: int) -> Procedure:
    row = procedures().filter(pk=pk).first()
    if row is None:
        raise NotVisible("procedure.unknown", "There is no such procedure.")
    return row


def accessories() -> QuerySet[Accessory]:
    return Accessory.objects.select_related("instrument").order_by("instrument__code", "code")


def reference_is_valid(reference: Reference, *, on: date | None = None) -> bool:
    """Approved, and neither the standard nor its spectrum past its date."""
    day = on or timezone.now().date()
    return (
        reference.state == ApprovalState.APPROVED
        and (reference.standard_expires_on is None or reference.standard_expires_on >= day)
        and (reference.spectrum_valid_until is None or reference.spectrum_valid_until >= day)
    )


def upload(pk: int) -> Upload:
    row = Upload.objects.select_related("examination", "raw_file").filter(pk=pk).first()
    if row is None:
        raise NotVisible("upload.unknown", "There is no such file.")
    return row


def spectrum_with_analyses(pk: int) -> Spectrum:
    """A spectrum as the sample's table shows it: with its people and its analyses, the newest first."""
    row = (
        Spectrum.objects.select_related("upload__raw_file", "upload__uploaded_by", "measured_by", "examination")
        .prefetch_related(Prefetch("analyses", Analysis.objects.order_by("-pk").defer("result")))
        .filter(pk=pk)
        .first()
    )
    if row is None:
        raise NotVisible("spectrum.unknown", "There is no such spectrum.")
    return row


def failed_analyses() -> QuerySet[Analysis]:
    """Failed ones that nobody has tried again."""
    newer = Analysis.objects.filter(spectrum=OuterRef("spectrum"), pk__gt=OuterRef("pk"))
    return Analysis.objects.filter(state=AnalysisState.FAILED).exclude(Exists(newer))


@dataclass(frozen=True)
class DraftToApprove:
    kind: str  # as in spectra.services.approvals.APPROVABLE
    words: str
    row: Model


def drafts_to_approve() -> list[DraftToApprove]:
    """Every draft of master data, oldest first; one query for each kind."""
    kinds: tuple[tuple[str, str, type[Model]], ...] = (
        ("material", "material", MaterialVersion),
        ("procedure", "procedure", Procedure),
        ("method", "method", MethodVersion),
        ("group_table", "group table", GroupTable),
        ("watch_list", "watch list", WatchList),
        ("reference", "reference", Reference),
    )
    found = [
        DraftToApprove(kind, words, row)
        for kind, words, model in kinds
        for row in model.objects.filter(state=ApprovalState.DRAFT).select_related("author").order_by("created_at")[:50]
    ]
    return sorted(found, key=lambda item: item.row.created_at)


@dataclass(frozen=True)
class Expiring:
    label: str
    words: str
    on: date
    why: str
    url_name: str
    url_args: tuple[object, ...]


def expiring_soon(*, days: int = 30) -> list[Expiring]:
    """Standards, reference spectra, instrument checks and qualifications that end within `days`, or have ended."""
    until = timezone.now().date() + timedelta(days=days)
    found = []
    for row in Reference.objects.filter(state=ApprovalState.APPROVED, superseded_by__isnull=True):
        for on, words in (
            (row.standard_expires_on, "standard"),
            (row.spectrum_valid_until, "spectrum of the standard"),
        ):
            if on is not None and on <= until:
                why = "Outside its validity a reference carries no verdict."
                found.append(Expiring(str(row), words, on, why, "spectra:reference", (row.pk,)))
    for instrument in Instrument.objects.filter(in_service=True).prefetch_related("qualifications"):
        newest = max(instrument.qualifications.all(), key=lambda q: (q.performed_on, q.pk), default=None)
        due = newest.due_on if newest else None
        if due is not None and due <= until:
            why = "Qualify it, or take it out of service."
            found.append(Expiring(instrument.code, "qualification", due, why, "spectra:instrument", (instrument.pk,)))
    return sorted(found, key=lambda item: item.on)
