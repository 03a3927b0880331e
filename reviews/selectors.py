"""Reads of the reviews layer: what waits for whom, what bears on a decision, what a version looked like when signed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Count, Prefetch, Q, QuerySet
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import NotVisible
from reviews.models import (
    Claim,
    ClaimStatus,
    Interpretation,
    InterpretationVersion,
    Judgement,
    MustSeePoint,
    ReviewRead,
)
from reviews.points import DraftPoint, StatedClaim, Surroundings, must_see_points
from reviews.transitions import State
from spectra import selectors as spectra_selectors
from spectra.models import Examination, Spectrum, SpectrumRole

VERSION_RELATED = (
    "interpretation__examination__delivery__material_version__material",
    "interpretation__examination__procedure",
    "analysis__spectrum__upload__raw_file",
    "analysis__spectrum__accessory__instrument",
    "analysis__reference__raw_file",
    "analysis__method",
    "analysis__group_table",
    "analysis__watch_list",
    "revises",
    "submitted_by",
    "taken_by",
    "submission",
)


def version(pk: int) -> InterpretationVersion:
    row = (
        InterpretationVersion.objects.select_related(*VERSION_RELATED, "decision__by", "decision__signature")
        .prefetch_related(Prefetch("claims", Claim.objects.select_related("stated_by")))
        .filter(pk=pk)
        .first()
    )
    if row is None:
        raise NotVisible("interpretation.unknown", "There is no such interpretation.")
    return row


def examination(pk: int) -> Examination:
    row = (
        Examination.objects.select_related(
            "delivery__material_version__material", "procedure__method", "opened_by", "interpretation"
        )
        .prefetch_related("samples__containers", "contributions__user")
        .filter(pk=pk)
        .first()
    )
    if row is None:
        raise NotVisible("examination.unknown", "There is no such examination.")
    return row


def versions_of(row: Examination) -> list[InterpretationVersion]:
    return list(
        InterpretationVersion.objects.select_related(
            "submitted_by",
            "taken_by",
            "opened_by",
            "decision__by",
            "decision__signature",
            "withdrawal__by",
            "submission",
        )
        .filter(interpretation__examination=row)
        .order_by("-number")
    )


def latest_version(row: Examination) -> InterpretationVersion | None:
    return InterpretationVersion.objects.filter(interpretation__examination=row).order_by("-number").first()


def stated_claims(version: InterpretationVersion) -> list[StatedClaim]:
    return [
        StatedClaim(
            key=claim.key,
            kind=claim.kind,
            title=claim.title,
            computed_verdict=claim.computed_verdict,
            verdict=claim.verdict,
            agrees=claim.agrees,
            status=claim.status,
            text=claim.computed_text,
            reason=claim.reason,
            must_see=claim.must_see,
            expected=bool(claim.evidence.get("expected")),
            hazard=claim.evidence.get("hazard", ""),
            region_cm1=_region(claim),
        )
        for claim in version.claims.all()
    ]


def _region(claim: Claim) -> tuple[float, float] | None:
    position = claim.evidence.get("position_cm1")
    return (position - 30.0, position + 30.0) if position is not None else None


def same_file_sentence(spectrum: Spectrum) -> str:
    """Where else the very same bytes were brought in; empty when nowhere."""
    others = spectra_selectors.same_bytes_elsewhere(spectrum)
    if not others:
        return ""
    names = ", ".join(sorted(sample.code for other in others for sample in other.samples.all()))
    return f"The same file, byte for byte, was also brought in for {names}: one measurement cannot show two samples."


def surroundings(version: InterpretationVersion) -> Surroundings:
    """The facts around a proposal that a reviewer has to see, each in a sentence."""
    row = version.interpretation.examination
    spectrum = version.analysis.spectrum
    spectra = list(spectra_selectors.spectra_of(row))
    return Surroundings(
        check=check_sentence(spectrum),
        reference=_reference_sentence(version),
        excluded=tuple(
            f"{s.upload.file_name}, {s.get_role_before_exclusion_display() or 'spectrum'}: {s.excluded_reason}"
            for s in spectra
            if s.role == SpectrumRole.EXCLUDED
        ),
        departures=tuple(departures(row, spectrum)),
        same_file=same_file_sentence(spectrum),
        reruns=tuple(
            f"{s.upload.file_name} was measured as {s.get_role_display()} beside the decisive spectrum."
            for s in spectra
            if s.role == SpectrumRole.REPEAT
        ),
        earlier=_earlier_sentence(version),
    )


def check_sentence(spectrum: Spectrum) -> str:
    """What is wrong with the instrument check that covers a spectrum; empty when nothing is."""
    if spectrum.accessory is None:
        return "The accessory that it was measured on is not recorded, so no instrument check covers it."
    at = spectrum.created_at
    check = spectra_selectors.check_in_force(spectrum.accessory, at=at)
    if spectra_selectors.check_is_valid(check, at=at):
        return ""
    if check is None:
        return f"{spectrum.accessory} has no instrument check on record."
    if check.verdict != "passed":
        verdict = check.get_verdict_display()
        return f"The last instrument check of {spectrum.accessory}, {utc(check.performed_at)}, was {verdict}."
    return f"The instrument check of {spectrum.accessory} was valid until {utc(check.valid_until)}, before the upload."


def utc(moment: datetime) -> str:
    return moment.strftime("%Y-%m-%d %H:%M UTC")


def _reference_sentence(version: InterpretationVersion) -> str:
    reference = version.analysis.reference
    if reference is None:
        return "The shelf has no approved reference of the declared material."
    problems = []
    if not spectra_selectors.reference_is_valid(reference, on=version.analysis.queued_at.date()):
        problems.append(f"{reference.code} was past its validity on the day of the analysis.")
    if reference.technique != version.analysis.spectrum.technique:
        problems.append(
            f"{reference.code} was measured by {reference.get_technique_display()}, "
            f"the sample by {version.analysis.spectrum.get_technique_display()}."
        )
    return " ".join(problems)


def departures(row: Examination, spectrum: Spectrum) -> list[str]:
    """Where the measurement differs from what the written procedure asks."""
    procedure = row.procedure
    found = []
    if spectrum.technique != procedure.technique:
        found.append(
            f"Measured by {spectrum.get_technique_display()}; {procedure} asks for {procedure.get_technique_display()}."
        )
    if spectrum.resolution_cm1 and spectrum.resolution_cm1 > procedure.resolution_cm1 * 1.05:
        found.append(
            f"Resolution {spectrum.resolution_cm1:g} cm⁻¹; {procedure} asks for {procedure.resolution_cm1:g} cm⁻¹."
        )
    if spectrum.first_cm1 > procedure.low_cm1 + procedure.resolution_cm1:
        found.append(
            f"The range begins at {spectrum.first_cm1:.0f} cm⁻¹; {procedure} asks for {procedure.low_cm1:g} cm⁻¹."
        )
    if spectrum.last_cm1 < procedure.high_cm1 - procedure.resolution_cm1:
        found.append(
            f"The range ends at {spectrum.last_cm1:.0f} cm⁻¹; {procedure} asks for {procedure.high_cm1:g} cm⁻¹."
        )
    measured = row.spectra.filter(role__in=[SpectrumRole.DECISIVE, SpectrumRole.REPLICATE]).count()
    if measured < procedure.repeats:
        found.append(f"{measured} of {procedure.repeats} prescribed spectra were measured.")
    return found


def _earlier_sentence(version: InterpretationVersion) -> str:
    earlier = version.revises
    if earlier is None:
        return ""
    decision = getattr(earlier, "decision", None)
    reasons = "; ".join(reason["text"] for reason in decision.reasons) if decision else ""
    before = {claim.key: claim for claim in earlier.claims.all()}
    changed = [
        claim.title
        for claim in version.claims.all()
        if claim.key not in before
        or (claim.verdict, claim.reason) != (before[claim.key].verdict, before[claim.key].reason)
    ]
    parts = [f"Version {earlier.number} was {earlier.get_state_display()}{': ' + reasons if reasons else ''}."]
    parts.append("Changed since: " + ", ".join(changed) + "." if changed else "No claim was changed since.")
    if version.conclusion != earlier.conclusion:
        parts.append(
            f"The conclusion was {earlier.get_conclusion_display()}, and is now {version.get_conclusion_display()}."
        )
    return " ".join(parts)


def draft_points(version: InterpretationVersion) -> list[DraftPoint]:
    """The points a reviewer of this draft would have to open, as they would be frozen now."""
    return must_see_points(
        claims=stated_claims(version),
        conclusion=version.conclusion,
        conclusion_text=version.conclusion_text,
        around=surroundings(version),
    )


def open_claims(version: InterpretationVersion) -> QuerySet[Claim]:
    return version.claims.filter(status=ClaimStatus.PROPOSED)


@dataclass(frozen=True)
class PointState:
    """One must-see point as the reviewer at the screen sees it."""

    point: MustSeePoint
    read: ReviewRead | None

    @property
    def word(self) -> str:
        if self.read is None:
            return "not opened"
        if self.read.judgement == Judgement.DISAGREE:
            return "disagreed, settled" if self.read.settled_at else "disagreed"
        return "agreed" if self.read.judgement else "opened, not judged"

    @property
    def is_done(self) -> bool:
        return bool(self.read and self.read.judgement and (self.read.judgement == "agree" or self.read.settled_at))


def point_states(version: InterpretationVersion, reviewer: User | None) -> list[PointState]:
    """The points of a version with what `reviewer` (the one who took it, or decided it) made of each."""
    reads: dict[int, ReviewRead] = {}
    if reviewer is not None:
        rows = ReviewRead.objects.filter(point__version=version, reviewer=reviewer).select_related("answered_by")
        reads = {read.point_id: read for read in rows}
    return [PointState(point, reads.get(point.pk)) for point in version.points.select_related("claim")]


def approval_blockers(version: InterpretationVersion, reviewer: User) -> list[str]:
    """What still stands between a reviewer and approval, in sentences; empty when nothing does."""
    states = point_states(version, reviewer)
    unopened = sum(1 for state in states if state.read is None)
    unjudged = sum(1 for state in states if state.read and not state.read.judgement)
    unsettled = sum(
        1 for state in states if state.read and state.read.judgement == Judgement.DISAGREE and not state.read.settled_at
    )
    blockers = []
    if unopened:
        blockers.append(f"{unopened} point{'s are' if unopened > 1 else ' is'} not opened.")
    if unjudged:
        blockers.append(f"{unjudged} opened point{'s are' if unjudged > 1 else ' is'} not judged.")
    if unsettled:
        blockers.append(f"{unsettled} disagreement{'s are' if unsettled > 1 else ' is'} not settled.")
    return blockers


# What waits for whom.


def _by_urgency(rows: QuerySet) -> QuerySet:
    prefix = "interpretation__examination__delivery__" if rows.model is InterpretationVersion else "delivery__"
    return rows.order_by(f"{prefix}priority", f"{prefix}due_on", "pk")


def waiting_versions(*, states: Sequence[State], limit: int = 100) -> list[InterpretationVersion]:
    rows = (
        InterpretationVersion.objects.filter(state__in=[str(state) for state in states])
        .select_related(
            "interpretation__examination__delivery__material_version", "submitted_by", "taken_by", "opened_by"
        )
        .prefetch_related("interpretation__examination__samples")
        .annotate(open_claims=Count("claims", filter=Q(claims__status=ClaimStatus.PROPOSED)))
    )
    return list(_by_urgency(rows)[:limit])


def proposals_for(reviewer: User, *, limit: int = 100) -> list[InterpretationVersion]:
    """Proposals that this reviewer may take or has taken: their own work is left out, others' takings are shown."""
    rows = waiting_versions(states=[State.SUBMITTED, State.READING_BLIND, State.IN_REVIEW], limit=500)
    own = set(
        Interpretation.objects.filter(
            pk__in=[row.interpretation_id for row in rows], examination__contributions__user=reviewer
        ).values_list("pk", flat=True)
    )
    return [row for row in rows if row.interpretation_id not in own][:limit]


def disagreements_to_answer(*, limit: int = 100) -> list[ReviewRead]:
    return list(
        ReviewRead.objects.filter(
            judgement=Judgement.DISAGREE, answer="", settled_at__isnull=True, point__version__state=str(State.IN_REVIEW)
        )
        .select_related("point__version__interpretation__examination__delivery__material_version", "reviewer")
        .order_by("judged_at")[:limit]
    )


def sent_back(*, limit: int = 100) -> list[InterpretationVersion]:
    """Rejected and withdrawn versions that nobody has revised yet."""
    rows = (
        InterpretationVersion.objects.filter(
            state__in=[str(State.REJECTED), str(State.WITHDRAWN)], revisions__isnull=True
        )
        .select_related("interpretation__examination__delivery__material_version", "decision__by", "withdrawal__by")
        .prefetch_related("interpretation__examination__samples")
    )
    return list(_by_urgency(rows)[:limit])


def examinations_waiting_for_files(*, limit: int = 100) -> list[Examination]:
    """Examinations without a readable decisive spectrum."""
    rows = (
        Examination.objects.exclude(spectra__role=SpectrumRole.DECISIVE)
        .select_related("delivery__material_version", "procedure")
        .prefetch_related("samples", "uploads")
    )
    return list(_by_urgency(rows)[:limit])


def examinations_in_analysis(*, limit: int = 100) -> list[Examination]:
    """Examinations whose decisive spectrum has an analysis that has not ended well: waiting, running or failed."""
    rows = (
        Examination.objects.filter(spectra__role=SpectrumRole.DECISIVE, interpretation__isnull=True)
        .select_related("delivery__material_version")
        .prefetch_related("samples", "spectra__analyses")
        .distinct()
    )
    return list(_by_urgency(rows)[:limit])


def recently_decided(*, limit: int = 10) -> list[InterpretationVersion]:
    return list(
        InterpretationVersion.objects.filter(decision__isnull=False)
        .select_related("interpretation__examination__delivery__material_version", "decision__by")
        .prefetch_related("interpretation__examination__samples")
        .order_by("-decision__at")[:limit]
    )


def overrides(*, limit: int = 50) -> list[Claim]:
    """Claims that analysts changed, newest first: where people and the computation differ."""
    return list(
        Claim.objects.filter(status=ClaimStatus.CHANGED)
        .exclude(version__state=str(State.DRAFT))
        .select_related("version__interpretation__examination__delivery__material_version", "stated_by")
        .prefetch_related("version__interpretation__examination__samples")
        .order_by("-stated_at")[:limit]
    )


def age_in_words(moment: datetime | None) -> str:
    if moment is None:
        return ""
    minutes = int((timezone.now() - moment).total_seconds() // 60)
    if minutes < 60:
        return f"{max(minutes, 0)} min"
    if minutes < 48 * 60:
        return f"{minutes // 60} h"
    return f"{minutes // 1440} days"
