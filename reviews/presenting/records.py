"""Deliveries, samples and their spectra: for Today, Samples, Sample, Delivery and the headline of every page."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date, datetime

from django.conf import settings
from django.urls import reverse
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import DomainError
from reviews import selectors
from reviews.integrity import evidence_may_change
from reviews.models import InterpretationVersion
from reviews.transitions import State
from spectra import permissions as spectra_permissions
from spectra import selectors as spectra_selectors
from spectra.models import AnalysisState, Examination, Priority, Sample, Spectrum, SpectrumRole

CONCLUSION_AGREES = {"complies": "yes", "does_not_comply": "no", "inconclusive": "neutral", "": "neutral"}


def sample_of(examination: Examination) -> Sample | None:
    return next(iter(examination.samples.all()), None)


def title_of(examination: Examination) -> str:
    sample = sample_of(examination)
    return sample.code if sample else examination.code


def sample_url(examination: Examination) -> str:
    sample = sample_of(examination)
    return reverse("reviews:sample", args=[sample.pk]) if sample else reverse("reviews:samples")


def numbers_in_words(numbers: Sequence[int]) -> str:
    """1, 2, 3, 5 as "1-3, 5"."""
    runs: list[list[int]] = []
    for number in sorted(numbers):
        if runs and number == runs[-1][1] + 1:
            runs[-1][1] = number
        else:
            runs.append([number, number])
    return ", ".join(f"{first}" if first == last else f"{first}-{last}" for first, last in runs)


def headline_facts(examination: Examination) -> list[dict[str, str]]:
    """The facts beside a sample's number, for _headline.html."""
    delivery = examination.delivery
    sample = sample_of(examination)
    containers = numbers_in_words([container.number for container in sample.containers.all()]) if sample else ""
    facts = [
        {"name": "declared", "value": delivery.material_version.name},
        {
            "name": "lot",
            "value": f"{delivery.lot}, container {containers} of {delivery.containers_total}",
            "url": reverse("reviews:delivery", args=[delivery.pk]),
        },
        {"name": "supplier", "value": delivery.supplier},
        {"name": "procedure", "value": str(examination.procedure)},
    ]
    if delivery.due_on:
        facts.append({"name": "due", "value": delivery.due_on.isoformat()})
    return facts


def measurement_facts(spectrum: Spectrum) -> list[dict[str, str]]:
    """How the spectrum was measured, for the bench's facts strip."""
    facts = [{"name": "technique", "value": spectrum.get_technique_display()}]
    if spectrum.accessory:
        facts.append({"name": "measured on", "value": str(spectrum.accessory)})
    if spectrum.resolution_cm1:
        facts.append({"name": "resolution", "value": f"{spectrum.resolution_cm1:g} cm⁻¹"})
    facts.append({"name": "range", "value": f"{spectrum.last_cm1:.0f} to {spectrum.first_cm1:.0f} cm⁻¹"})
    facts.append(
        {"name": "instrument check", "value": "see below" if selectors.check_sentence(spectrum) else "valid at upload"}
    )
    return facts


def life_line(examination: Examination, version: InterpretationVersion | None) -> list[dict[str, object]]:
    """received, spectrum in, analysed, interpreted, decided: where the sample stands, for _headline.html."""
    decisive = spectra_selectors.decisive_spectrum(examination)
    analysis = spectra_selectors.latest_analysis(decisive) if decisive else None
    finished = analysis.finished_at if analysis and analysis.state == AnalysisState.DONE else None
    submitted = version.submitted_at if version and version.state != State.DRAFT else None
    decision = getattr(version, "decision", None) if version else None
    steps: list[tuple[str, str, datetime | None]] = [
        ("received", "received", examination.opened_at),
        ("spectrum in", "waits for a spectrum", decisive.created_at if decisive else None),
        ("analysed", "being analysed", finished),
        ("interpreted", "being interpreted", submitted),
        (
            decision.get_verdict_display() if decision else "decided",
            "second reading",
            decision.at if decision else None,
        ),
    ]
    withdrawal = getattr(version, "withdrawal", None) if version else None
    if withdrawal is not None:
        steps.append(("withdrawn", "withdrawn", withdrawal.at))
    line, now_set = [], False
    for done, now, when in steps:
        state = "done" if when else "ahead" if now_set else "now"
        now_set = now_set or not when
        line.append({"label": now if state == "now" else done, "state": state, "when": when})
    return line


def crumbs(examination: Examination, *, to_sample: bool = True) -> list[dict[str, str]]:
    delivery = examination.delivery
    trail = [
        {"label": "Samples", "url": reverse("reviews:samples")},
        {"label": f"Lot {delivery.lot}", "url": reverse("reviews:delivery", args=[delivery.pk])},
    ]
    if to_sample:
        trail.append({"label": title_of(examination), "url": sample_url(examination)})
    return trail


def state_of(examination: Examination, version: InterpretationVersion | None) -> str:
    """One word for where an examination stands: a version's state, or what comes before there is one."""
    if version is not None:
        return version.state
    for spectrum in examination.spectra.all():
        if spectrum.role == SpectrumRole.DECISIVE:
            for analysis in spectrum.analyses.all():
                return analysis.state
    return "waits for a spectrum"


def is_late(due: date | None) -> bool:
    return due is not None and due < timezone.now().date()


def work_row(
    examination: Examination, *, url: str, state: str, since: datetime | None, why: str, label: str = ""
) -> dict[str, object]:
    """One line of Today, for today.html."""
    delivery = examination.delivery
    return {
        "label": label or title_of(examination),
        "url": url,
        "material": f"{delivery.material_version.name}, lot {delivery.lot}",
        "state": state,
        "age": selectors.age_in_words(since),
        "due": delivery.due_on,
        "late": is_late(delivery.due_on),
        "priority": {Priority.URGENT: "high", Priority.LOW: "low"}.get(delivery.priority, ""),
        "why": why,
    }


def sample_rows(samples: Sequence[Sample]) -> list[dict[str, object]]:
    """Lines of the sample list, for samples.html and delivery.html; two queries whatever the number of samples."""
    examinations = Examination.objects.filter(samples__in=samples).prefetch_related("samples", "spectra__analyses")
    by_sample: dict[int, Examination] = {}
    for examination in examinations.order_by("pk"):
        for sample in examination.samples.all():
            by_sample[sample.pk] = examination
    versions: dict[int, InterpretationVersion] = {}
    rows = InterpretationVersion.objects.filter(interpretation__examination__in=by_sample.values())
    for version in rows.select_related("interpretation", "submitted_by", "opened_by", "decision__by").order_by(
        "number"
    ):
        versions[version.interpretation.examination_id] = version
    lines = []
    for sample in samples:
        examination = by_sample.get(sample.pk)
        version = versions.get(examination.pk) if examination else None
        lines.append(_sample_row(sample, examination, version))
    return lines


def _sample_row(
    sample: Sample, examination: Examination | None, version: InterpretationVersion | None
) -> dict[str, object]:
    delivery = sample.delivery
    decision = getattr(version, "decision", None) if version else None
    last = (decision.at, decision.by) if decision else (None, None)
    if last[0] is None and version is not None:
        last = (version.submitted_at or version.opened_at, version.submitted_by or version.opened_by)
    at, by = last if last[0] else (sample.registered_at, None)
    state = state_of(examination, version) if examination else "registered"
    open_ended = state not in (State.APPROVED, State.WITHDRAWN)
    return {
        "label": sample.code,
        "url": reverse("reviews:sample", args=[sample.pk]),
        "material": delivery.material_version.name,
        "lot": delivery.lot,
        "lot_url": reverse("reviews:delivery", args=[delivery.pk]),
        "containers": "container " + numbers_in_words([container.number for container in sample.containers.all()]),
        "form": sample.get_kind_display(),
        "state": state,
        "conclusion": version.conclusion if version else "",
        "agrees": CONCLUSION_AGREES[version.conclusion if version else ""],
        "by": by.printed_name if by else "",
        "at": at,
        "due": delivery.due_on,
        "late": open_ended and is_late(delivery.due_on),
    }


def spectrum_row(spectrum: Spectrum, *, asked: int = 0) -> dict[str, object]:
    """One spectrum of the sample's table, for _spectrum_row.html. `asked`: how often the page has asked already."""
    analysis = next(iter(spectrum.analyses.all()), None)
    state = analysis.state if analysis else "not analysed"
    delay_s = min(1 + asked // 5, 10)
    return {
        "id": spectrum.pk,
        "label": spectrum.title or spectrum.upload.file_name,
        "file": spectrum.upload.file_name,
        "sha256": spectrum.upload.raw_file.sha256,
        "role": spectrum.get_role_display(),
        "technique": spectrum.get_technique_display(),
        "measured_text": spectrum.measured_at_text,
        "measured_by": spectrum.measured_by.printed_name if spectrum.measured_by else "",
        "uploaded_at": spectrum.upload.uploaded_at,
        "uploaded_by": spectrum.upload.uploaded_by.printed_name,
        "analysis_state": state,
        "analysis_problem": analysis.problem_text if analysis else "",
        "percent": analysis.progress_percent if analysis else None,
        "step": analysis.step if analysis else "",
        "remarks": spectrum.reading_findings,
        "self_checking": spectrum.self_checking,
        "coding": spectrum.coding,
        "bench_url": reverse("reviews:bench", args=[spectrum.pk]) if state == AnalysisState.DONE else "",
        "retry_url": reverse("reviews:retry", args=[analysis.pk]) if state == AnalysisState.FAILED else "",
        "row_url": reverse("reviews:spectrum_row", args=[spectrum.pk]) + f"?asked={asked + 1}",
        "role_url": reverse("reviews:change_role", args=[spectrum.pk]),
        "role_value": spectrum.role,
        "delay_s": delay_s,
        "excluded_reason": spectrum.excluded_reason,
    }


def version_rows(versions: Sequence[InterpretationVersion]) -> list[dict[str, object]]:
    """The versions of an interpretation, for sample.html."""
    rows = []
    for version in versions:
        decision = getattr(version, "decision", None)
        withdrawal = getattr(version, "withdrawal", None)
        by = version.submitted_by or version.opened_by
        reasons = [reason["text"] for reason in decision.reasons] if decision else []
        if withdrawal:
            reasons.append(f"withdrawn by {withdrawal.by.printed_name}: {withdrawal.reason}")
        rows.append(
            {
                "number": version.number,
                "state": version.state,
                "conclusion": version.conclusion,
                "agrees": CONCLUSION_AGREES[version.conclusion],
                "by": by.printed_name if by else "drafted from the analysis",
                "at": version.submitted_at or version.opened_at,
                "decided_by": decision.by.printed_name if decision else "",
                "decided_at": decision.at if decision else None,
                "reasons": reasons,
                "url": reverse("reviews:version", args=[version.pk]),
            }
        )
    return rows


def upload_panel(examination: Examination, user: User) -> dict[str, object] | None:
    """The upload form of a sample, or None when this person cannot bring in files now."""
    if not spectra_permissions.may_analyse(user):
        return None
    try:
        evidence_may_change(examination, user)
    except DomainError:
        return None
    return {
        "url": reverse("reviews:upload", args=[examination.pk]),
        "technique": examination.procedure.get_technique_display(),
        "max_files": settings.UPLOAD_MAX_FILES,
        "max_mb": settings.UPLOAD_MAX_BYTES // 1_000_000,
        "accept": ".jdx,.dx,.jcm,.csv,.txt,.tsv,.asc,.dat",
    }
