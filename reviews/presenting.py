"""From rows to what the templates of this layer show. Reads only; each function says which template it feeds."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from datetime import date, datetime

from django.conf import settings
from django.urls import reverse
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import DomainError
from reviews import permissions, selectors
from reviews.integrity import evidence_may_change
from reviews.models import (
    Claim,
    ClaimKind,
    ClaimStatus,
    Conclusion,
    InterpretationVersion,
    Judgement,
    MustSeePoint,
)
from reviews.services import drafts
from reviews.transitions import Action, State
from reviews.words import VERDICTS
from spectra import permissions as spectra_permissions
from spectra import selectors as spectra_selectors
from spectra.models import Analysis, AnalysisState, Examination, Sample, Spectrum, SpectrumRole

CONCLUSION_AGREES = {"complies": "yes", "does_not_comply": "no", "inconclusive": "neutral", "": "neutral"}
KIND_WORDS = {
    "override": "override",
    "added": "added claim",
    "contradiction": "contradiction",
    "identity": "identity",
    "quality": "doubtful measurement",
    "impurity": "impurity",
    "unexplained": "unexplained band",
    "undecided": "undecided",
    "hazard": "hazard",
    "instrument_check": "instrument check",
    "reference": "reference",
    "procedure": "procedure",
    "excluded": "excluded spectrum",
    "rerun": "measured again",
    "revision": "revision",
    "conclusion": "conclusion",
}


def sample_of(examination: Examination) -> Sample | None:
    return next(iter(examination.samples.all()), None)


def title_of(examination: Examination) -> str:
    sample = sample_of(examination)
    return sample.code if sample else examination.code


def sample_url(examination: Examination) -> str:
    sample = sample_of(examination)
    return reverse("reviews:sample", args=[sample.pk]) if sample else reverse("reviews:samples")


def headline_facts(examination: Examination) -> list[dict[str, str]]:
    """The facts beside a sample's number, for _headline.html."""
    delivery = examination.delivery
    sample = sample_of(examination)
    containers = ", ".join(str(container.number) for container in sample.containers.all()) if sample else ""
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
    trouble = selectors.check_sentence(spectrum)
    facts.append({"name": "instrument check", "value": trouble or "valid at upload"})
    return facts


def life_line(examination: Examination, version: InterpretationVersion | None) -> list[dict[str, object]]:
    """received, measured, analysed, interpreted, reviewed: where the sample stands, for _headline.html."""
    decisive = spectra_selectors.decisive_spectrum(examination)
    analysis = spectra_selectors.latest_analysis(decisive) if decisive else None
    finished = analysis.finished_at if analysis and analysis.state == AnalysisState.DONE else None
    submitted = version.submitted_at if version and version.state != State.DRAFT else None
    decision = getattr(version, "decision", None) if version else None
    steps: list[tuple[str, str, datetime | None]] = [
        ("received", "received", examination.opened_at),
        ("measured", "waits for a spectrum", decisive.created_at if decisive else None),
        ("analysed", "being analysed", finished),
        ("interpreted", "being interpreted", submitted),
        (
            decision.get_verdict_display() if decision else "decided",
            "second reading",
            decision.at if decision else None,
        ),
    ]
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


# Today, Samples


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
        "priority": "high" if delivery.priority == 1 else "",
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
        "containers": "container " + ", ".join(str(container.number) for container in sample.containers.all()),
        "form": sample.get_kind_display(),
        "state": state,
        "conclusion": version.conclusion if version else "",
        "agrees": CONCLUSION_AGREES[version.conclusion if version else ""],
        "by": by.printed_name if by else "",
        "at": at,
        "due": delivery.due_on,
        "late": open_ended and is_late(delivery.due_on),
    }


# Sample


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


# Bench


def lanes(result: Mapping, claimed: Sequence[str]) -> dict[str, list[dict[str, object]]]:
    """The lanes for _plot.html: first those that a claim speaks of or the spectrum supports; the rest stays folded."""
    items = {item["group"]: item for item in result.get("groups", ())}
    order = {"supported": 0, "undecided": 1, "contradicted": 2, "not_examined": 3}
    shown, folded = [], []
    for lane in result.get("lanes", ()):
        item = items.get(lane["group"], {})
        row = lane | {"agrees": item.get("agrees", "neutral"), "probability": item.get("probability")}
        (shown if lane["verdict"] == "supported" or lane["group"] in claimed else folded).append(row)

    def by_weight(row: Mapping) -> tuple:
        return (row["agrees"] != "no", order.get(row["verdict"], 4))

    return {"lanes": sorted(shown, key=by_weight), "lanes_folded": sorted(folded, key=by_weight)}


def claimed_groups(version: InterpretationVersion) -> list[str]:
    return [claim.subject for claim in version.claims.all() if claim.kind == ClaimKind.GROUP]


def band_rows(result: Mapping) -> list[dict[str, object]]:
    labels = {lane["group"]: lane["label"] for lane in result.get("lanes", ())}
    return [
        band | {"used_by": [labels.get(group, group.replace("_", " ")) for group in band.get("used_by", ())]}
        for band in sorted(result.get("bands", ()), key=lambda band: -band["position_cm1"])
    ]


def plot(spectrum: Spectrum, analysis: Analysis, result: Mapping) -> dict[str, object]:
    """What _plot.html needs to fetch and label the plot."""
    overlays = []
    if result.get("identity"):
        label = analysis.reference.code if analysis.reference else "reference"
        overlays = [
            {"key": "reference", "label": f"Reference {label}", "on": True},
            {"key": "residual", "label": "Residual", "on": False},
        ]
    overlays.append({"key": "baseline", "label": "Baseline", "on": False})
    relative = is_relative(result)
    return {
        "url": reverse("reviews:plot", args=[analysis.pk]),
        "title": f"Spectrum {spectrum.upload.file_name}",
        "show": "absorbance",
        "can_transmittance": not relative,
        "overlays": overlays,
    }


def is_relative(result: Mapping) -> bool:
    return bool((result.get("ordinate") or {}).get("relative"))


def claim_item(claim: Claim, *, lanes_by_group: Mapping[str, Sequence[float]]) -> dict[str, object]:
    """One claim for _claim.html."""
    evidence = claim.evidence
    positions = list(lanes_by_group.get(claim.subject, ())) if claim.kind == ClaimKind.GROUP else []
    if "position_cm1" in evidence:
        positions = [evidence["position_cm1"]]
    version_args = [claim.version_id, claim.pk]
    return {
        "id": claim.pk,
        "kind": claim.kind,
        "title": claim.title,
        "group": claim.subject if claim.kind == ClaimKind.GROUP else "",
        "verdict": claim.verdict,
        "agrees": claim.agrees,
        "probability": evidence.get("probability"),
        "statement": "" if evidence.get("for") or evidence.get("against") else claim.computed_text,
        "points_for": evidence.get("for", []),
        "points_against": evidence.get("against", []),
        "would_decide": evidence.get("would_decide", []),
        "hazard": evidence.get("hazard", ""),
        "weight": evidence.get("weight", ""),
        "limit": claim.computed_text if claim.kind == ClaimKind.IMPURITY else "",
        "band_positions_cm1": positions,
        "must_see": claim.must_see,
        "must_see_why": "The reviewer has to open this before deciding.",
        "status": "computed" if claim.status == ClaimStatus.PROPOSED else claim.status,
        "by": claim.stated_by.printed_name if claim.stated_by else "",
        "at": claim.stated_at,
        "reason": claim.reason,
        "computed_verdict": claim.computed_verdict,
        "computed_agrees": claim.computed_agrees,
        "choices": list(VERDICTS[claim.kind].items()),
        "confirm_url": reverse("reviews:confirm_claim", args=version_args),
        "change_url": reverse("reviews:change_claim", args=version_args),
        "remove_url": reverse("reviews:remove_claim", args=version_args) if claim.status == ClaimStatus.ADDED else "",
        "errors": None,
        "typed": {},
    }


def positions_by_group(result: Mapping) -> dict[str, list[float]]:
    return {
        lane["group"]: [position for window in lane["windows"] for position in window["band_positions_cm1"]]
        for lane in result.get("lanes", ())
    }


def claim_items(version: InterpretationVersion, result: Mapping) -> list[dict[str, object]]:
    positions = positions_by_group(result)
    claims = sorted(
        version.claims.all(),
        key=lambda c: (c.kind != ClaimKind.IDENTITY, c.status != "proposed", not c.must_see, c.sort),
    )
    return [claim_item(claim, lanes_by_group=positions) for claim in claims]


def bench_state(version: InterpretationVersion, user: User) -> dict[str, object]:
    """What changes with every claim: how many wait, whether it can be signed. Feeds _claims_head.html, _submit.html."""
    editable = permissions.may(user, version, Action.EDIT)
    states = Counter(claim.status for claim in version.claims.all())
    uneventful = [
        claim
        for claim in version.claims.all()
        if claim.status == ClaimStatus.PROPOSED and claim.computed_agrees == "yes" and not claim.must_see
    ]
    try:
        drafts.preview(version)
        ready, why_not = True, ""
    except DomainError as error:
        ready, why_not = False, f"{error.message} {error.remedy}".strip()
    return {
        "version": version,
        "editable": editable,
        "unconfirmed": states[ClaimStatus.PROPOSED],
        "confirm_all_url": reverse("reviews:confirm_uneventful", args=[version.pk]) if uneventful else "",
        "uneventful": len(uneventful),
        "submit": {"url": reverse("reviews:submit", args=[version.pk]), "ready": ready, "why_not": why_not},
        "why_read_only": "" if editable else read_only_sentence(version, user),
    }


def read_only_sentence(version: InterpretationVersion, user: User) -> str:
    if version.state == State.DRAFT:
        return "Only an analyst can work on the claims."
    return f"This version is {version.get_state_display()}: its claims stay as they were signed."


def bench_conclusion(version: InterpretationVersion) -> dict[str, object]:
    return {
        "url": reverse("reviews:write_conclusion", args=[version.pk]),
        "value": version.conclusion,
        "text": version.conclusion_text,
        "choices": Conclusion.choices,
        "errors": {},
        "saved_at": None,
        "by": version.submitted_by.printed_name if version.submitted_by else "",
    }


def decision_note(version: InterpretationVersion) -> dict[str, object] | None:
    decision = getattr(version, "decision", None)
    if decision is None:
        return None
    withdrawal = getattr(version, "withdrawal", None)
    reasons = [reason["text"] for reason in decision.reasons]
    if decision.comment:
        reasons.append(decision.comment)
    if withdrawal:
        reasons.append(
            f"Withdrawn by {withdrawal.by.printed_name}, {selectors.utc(withdrawal.at)}: {withdrawal.reason}"
        )
    return {
        "state": version.state,
        "by": decision.by.printed_name,
        "at": decision.at,
        "meaning": decision.signature.get_meaning_display(),
        "reasons": reasons,
        "signature_digest": decision.signature.digest,
    }


# Review


def point_items(version: InterpretationVersion, reviewer: User | None, viewer: User) -> list[dict[str, object]]:
    """The must-see points with what the reviewer made of each, for _points.html."""
    bench_url = reverse("reviews:bench", args=[version.analysis.spectrum_id])
    items = []
    for state in selectors.point_states(version, reviewer):
        point, read = state.point, state.read
        args = [version.pk, point.pk]
        items.append(
            {
                "id": point.pk,
                "title": point.title,
                "kind": KIND_WORDS.get(point.kind, point.kind),
                "opened_at": read.opened_at if read else None,
                "opened_by": reviewer.printed_name if reviewer else "",
                "state_word": state.word,
                "detail": sentences(point),
                "comment_required": point.comment_required,
                "bench_url": f"{bench_url}#claim-{point.claim_id}" if point.claim_id else "",
                "open_url": reverse("reviews:open_point", args=args),
                "note_url": reverse("reviews:judge_point", args=args),
                "answer_url": reverse("reviews:answer_point", args=args)
                if read
                and read.judgement == Judgement.DISAGREE
                and permissions.may(viewer, version, Action.ANSWER)
                and viewer.pk != version.taken_by_id
                else "",
                "settle_url": reverse("reviews:settle_point", args=args)
                if read
                and read.judgement == Judgement.DISAGREE
                and read.answer
                and not read.settled_at
                and viewer.pk == version.taken_by_id
                else "",
                "note": read.comment if read else "",
                "judgement": read.judgement if read else "",
                "answer": read.answer if read else "",
                "answered_by": read.answered_by.printed_name if read and read.answered_by else "",
                "settlement": read.settlement if read else "",
                "settled_at": read.settled_at if read else None,
                "errors": {},
            }
        )
    return items


def sentences(point: MustSeePoint) -> list[str]:
    return [line for line in point.detail.split("\n") if line]


def review_rows(version: InterpretationVersion, result: Mapping, points: Sequence[Mapping]) -> list[dict[str, object]]:
    """Computed, analyst and reviewer side by side, for review.html."""
    positions = positions_by_group(result)
    judged = {}
    point_claims = {point.pk: point.claim_id for point in version.points.all()}
    for item in points:
        claim_id = point_claims.get(item["id"])
        if claim_id and item["judgement"]:
            judged[claim_id] = {"judgement": item["judgement"], "note": item["note"]}
    bench_url = reverse("reviews:bench", args=[version.analysis.spectrum_id])
    rows = []
    for claim in version.claims.all():
        added = claim.status == ClaimStatus.ADDED
        rows.append(
            {
                "title": claim.title,
                "group": claim.subject if claim.kind == ClaimKind.GROUP else "",
                "band_positions_cm1": positions.get(claim.subject, []) if claim.kind == ClaimKind.GROUP else [],
                "computed": None
                if added
                else {
                    "verdict": claim.computed_verdict,
                    "agrees": claim.computed_agrees,
                    "probability": claim.evidence.get("probability"),
                },
                "analyst": {"verdict": claim.verdict, "agrees": claim.agrees, "note": claim.reason},
                "reviewer": judged.get(claim.pk),
                "differs": claim.status in (ClaimStatus.CHANGED, ClaimStatus.ADDED),
                "bench_url": f"{bench_url}#claim-{claim.pk}",
            }
        )
    return sorted(rows, key=lambda row: not row["differs"])


def contributors(examination: Examination) -> list[dict[str, str]]:
    people: dict[str, list[str]] = {}
    for contribution in examination.contributions.all():
        people.setdefault(contribution.user.printed_name, []).append(contribution.get_kind_display())
    return [{"name": name, "did": ", ".join(sorted(did))} for name, did in people.items()]


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
