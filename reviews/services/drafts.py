"""The analyst's side: claims drafted from an analysis, confirmed, changed or added; the conclusion; the submission."""

from __future__ import annotations

import re
from collections.abc import Mapping

from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import BadInput, NotPossible, NotVisible, Stale
from labsite.signing import services as signing
from labsite.signing.models import Meaning
from labsite.signing.services import SigningProof
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work
from reviews import content, permissions, selectors
from reviews.drafting import DraftClaim, draft_claims
from reviews.models import (
    Claim,
    ClaimKind,
    ClaimStatus,
    Conclusion,
    Interpretation,
    InterpretationVersion,
    MustSeePoint,
)
from reviews.transitions import Action, State
from reviews.words import VERDICTS, agrees_after, verdict_words
from spectra import selectors as spectra_selectors
from spectra.models import Analysis, ContributionKind, SpectrumRole
from spectra.services.locking import locked_examination
from spectra.services.receiving import contribute
from spectra.services.texts import LONGEST_TITLE, bounded
from spectra.subjects import examination_subject

CONSISTENT = ("consistent", "consistent_with_differences")


def subject_of(version: InterpretationVersion) -> Subject:
    return examination_subject(version.interpretation.examination)


def label_of(version: InterpretationVersion) -> str:
    """How people know a version in the trail: by its examination's number, not by a row."""
    return f"{subject_of(version).label}, version {version.number}"


def locked(version_id: int) -> InterpretationVersion:
    """The version under its lock, with what its rules ask about. Its examination is locked before it: see `locking`."""
    known = InterpretationVersion.objects.filter(pk=version_id)
    locked_examination(known.values_list("interpretation__examination_id", flat=True).first())
    version = (
        InterpretationVersion.objects.select_for_update(of=("self",), no_key=True)
        .select_related("interpretation__examination")
        .filter(pk=version_id)
        .first()
    )
    if version is None:
        raise NotVisible("interpretation.unknown", "There is no such interpretation.")
    return version


def draft_from_analysis(analysis: Analysis) -> None:
    """Draft the claims of a finished analysis. Called inside the unit of work that finishes it.

    Only the decisive spectrum of an examination speaks, and only into a draft: a proposal that is with a reviewer, or
    decided, stands on the analysis it was made from.
    """
    spectrum = analysis.spectrum
    if spectrum.role != SpectrumRole.DECISIVE:
        return
    if spectrum.analyses.filter(pk__gt=analysis.pk).exists():
        return  # a later analysis of the same spectrum is under way, or has spoken already
    interpretation, fresh = Interpretation.objects.get_or_create(
        examination=spectrum.examination, defaults={"created_at": timezone.now()}
    )
    claims = draft_claims(spectra_selectors.result_of(analysis))
    if fresh:
        version = InterpretationVersion.objects.create(
            interpretation=interpretation, number=1, analysis=analysis, opened_at=timezone.now()
        )
    else:
        version = interpretation.versions.select_for_update(no_key=True).filter(state=State.DRAFT).first()
        if version is None:
            return
        record(
            Event.CLAIM_REMOVED,
            by=None,
            subject=subject_of(version),
            facts={"version": version.number, "analysis": version.analysis_id},
            old={
                "claims": {
                    claim.key: {"verdict": claim.verdict, "status": claim.status, "reason": claim.reason}
                    for claim in version.claims.all()
                },
                "conclusion": version.conclusion,
                "conclusion_text": version.conclusion_text,
            },
            reason="The decisive spectrum was analysed anew; its claims take the place of these.",
        )
        version.claims.all().delete()
        version.analysis = analysis
        version.conclusion = version.conclusion_text = ""  # it rested on the claims that are gone
        version.edits += 1
        version.save(update_fields=["analysis", "conclusion", "conclusion_text", "edits"])
    _write_claims(version, claims)
    record(
        Event.CLAIM_DRAFTED,
        by=None,
        subject=subject_of(version),
        facts={"version": version.number, "analysis": analysis.pk, "result_digest": analysis.result_digest},
        new={claim.key: claim.verdict for claim in claims},
    )


def _write_claims(version: InterpretationVersion, claims: list[DraftClaim]) -> None:
    Claim.objects.bulk_create(
        Claim(
            version=version,
            key=claim.key,
            kind=claim.kind,
            subject=claim.subject[:120],
            title=claim.title[:LONGEST_TITLE],
            sort=sort,
            computed_verdict=claim.verdict,
            computed_agrees=claim.agrees,
            computed_text=claim.text,
            evidence=dict(claim.evidence),
            must_see=claim.must_see,
            verdict=claim.verdict,
            agrees=claim.agrees,
        )
        for sort, claim in enumerate(claims)
    )


def _editable(version_id: int, by: User, edits: int | None) -> InterpretationVersion:
    version = locked(version_id)
    permissions.require(by, version, Action.EDIT)
    if edits is not None and edits != version.edits:
        raise Stale(
            "interpretation.changed",
            "This interpretation was changed since the page was shown.",
            remedy="Look at it again, then repeat the step.",
        )
    return version


def _edited(version: InterpretationVersion, by: User, kind: str) -> None:
    version.edits += 1
    if version.opened_by_id is None:
        version.opened_by = by
    version.save()
    contribute(examination=version.interpretation.examination, user=by, kind=kind)


def _claim(version: InterpretationVersion, claim_id: int) -> Claim:
    claim = version.claims.select_for_update().filter(pk=claim_id).first()
    if claim is None:
        raise NotVisible("claim.unknown", "There is no such claim in this version.")
    return claim


def confirm_claim(*, version_id: int, claim_id: int, by: User) -> Claim:
    """The analyst takes the computed verdict as their own."""
    with unit_of_work():
        version = _editable(version_id, by, None)
        claim = _claim(version, claim_id)
        if claim.status == ClaimStatus.ADDED:
            raise NotPossible("claim.added", "A claim you added needs no confirmation.")
        if claim.status == ClaimStatus.CONFIRMED and claim.stated_by_id != by.pk:
            raise NotPossible(
                "claim.confirmed_already",
                f"{claim.stated_by.printed_name} has confirmed this claim already.",
                remedy="Go on with the next one, or change it and say why.",
            )
        old = {"verdict": claim.verdict, "status": claim.status}
        _confirm(claim, by)
        _edited(version, by, ContributionKind.CLAIMED)
        record(
            Event.CLAIM_CONFIRMED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "claim": claim.key},
            old=old,
            new={"verdict": claim.verdict, "status": claim.status},
        )
    return claim


def _confirm(claim: Claim, by: User) -> None:
    claim.status, claim.reason = ClaimStatus.CONFIRMED, ""
    claim.verdict, claim.agrees = claim.computed_verdict, claim.computed_agrees
    claim.stated_by, claim.stated_at = by, timezone.now()
    claim.save()


def confirm_uneventful(*, version_id: int, by: User) -> int:
    """Confirm at once every open claim that is as declared and that no reviewer must see. Returns how many."""
    with unit_of_work():
        version = _editable(version_id, by, None)
        rows = version.claims.select_for_update().filter(
            status=ClaimStatus.PROPOSED, computed_agrees="yes", must_see=False
        )
        claims = list(rows)
        if not claims:
            raise NotPossible("claim.none_uneventful", "No open claim is as declared and free of questions.")
        for claim in claims:
            _confirm(claim, by)
        _edited(version, by, ContributionKind.CLAIMED)
        record(
            Event.CLAIM_CONFIRMED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number},
            new={claim.key: claim.verdict for claim in claims},
        )
    return len(claims)


def change_claim(*, version_id: int, claim_id: int, by: User, verdict: str, reason: str, edits: int | None) -> Claim:
    """The analyst says otherwise than the computation, with a reason that the reviewer will read."""
    reason = bounded(reason, field="reason")
    with unit_of_work():
        version = _editable(version_id, by, edits)
        claim = _claim(version, claim_id)
        if verdict not in VERDICTS[claim.kind]:
            raise BadInput("claim.verdict", "Choose one of the verdicts.", field="verdict")
        if not reason:
            raise BadInput("claim.no_reason", "Say why you see it otherwise: the reviewer reads this.", field="reason")
        if verdict == claim.computed_verdict and claim.status != ClaimStatus.ADDED:
            raise BadInput(
                "claim.same_verdict", "That is what was computed: confirm the claim instead.", field="verdict"
            )
        old = {"verdict": claim.verdict, "status": claim.status, "reason": claim.reason}
        if claim.status != ClaimStatus.ADDED:
            claim.status = ClaimStatus.CHANGED
        claim.verdict, claim.reason = verdict, reason
        claim.agrees = agrees_after(claim.kind, verdict, expected=_expected(claim))
        claim.stated_by, claim.stated_at = by, timezone.now()
        claim.save()
        _edited(version, by, ContributionKind.CLAIMED)
        record(
            Event.CLAIM_CHANGED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "claim": claim.key, "computed": claim.computed_verdict},
            old=old,
            new={"verdict": claim.verdict, "status": claim.status},
            reason=reason,
        )
    return claim


def _expected(claim: Claim) -> bool | None:
    if claim.evidence.get("expected"):
        return True
    if claim.evidence.get("forbidden"):
        return False
    return None


def add_claim(*, version_id: int, by: User, kind: str, title: str, verdict: str, reason: str) -> Claim:
    """A claim of the analyst's own, beside the computed ones; the reason is its evidence in words."""
    title, reason = bounded(title, field="title", longest=LONGEST_TITLE), bounded(reason, field="reason")
    with unit_of_work():
        version = _editable(version_id, by, None)
        if kind not in (ClaimKind.GROUP, ClaimKind.IMPURITY, ClaimKind.UNEXPLAINED, ClaimKind.QUALITY):
            raise BadInput("claim.kind", "Choose what the claim is about.", field="kind")
        if verdict not in VERDICTS[kind]:
            raise BadInput("claim.verdict", "Choose one of the verdicts.", field="verdict")
        if not title:
            raise BadInput("claim.no_title", "Name the group, impurity or band.", field="title")
        if not reason:
            raise BadInput("claim.no_reason", "Say what in the spectrum shows it.", field="reason")
        slug = re.sub(r"[\W_]+", "-", title.casefold()).strip("-")[:80] or "claim"
        key = f"added:{kind}:{slug}"
        if version.claims.filter(key=key).exists():
            raise BadInput("claim.there_already", "You added that claim already: change it instead.", field="title")
        claim = Claim.objects.create(
            version=version,
            key=key,
            kind=kind,
            subject=slug[:40],
            title=title,
            sort=1000 + version.claims.count(),
            status=ClaimStatus.ADDED,
            verdict=verdict,
            agrees=agrees_after(kind, verdict, expected=None),
            reason=reason,
            must_see=True,
            stated_by=by,
            stated_at=timezone.now(),
        )
        _edited(version, by, ContributionKind.CLAIMED)
        record(
            Event.CLAIM_ADDED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "claim": key, "title": title},
            new={"verdict": verdict},
            reason=reason,
        )
    return claim


def remove_claim(*, version_id: int, claim_id: int, by: User, reason: str) -> None:
    """Take back a claim that was added, and say why; a computed one is never removed, only changed."""
    reason = bounded(reason, field="reason")
    with unit_of_work():
        version = _editable(version_id, by, None)
        claim = _claim(version, claim_id)
        if claim.status != ClaimStatus.ADDED:
            raise NotPossible("claim.computed", "A computed claim stays.", remedy="Change its verdict and say why.")
        if not reason:
            raise BadInput("claim.no_reason", "Say why the claim is taken back.", field="reason")
        record(
            Event.CLAIM_REMOVED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "claim": claim.key},
            old={"title": claim.title, "verdict": claim.verdict, "reason": claim.reason},
            reason=reason,
        )
        claim.delete()
        _edited(version, by, ContributionKind.CLAIMED)


def write_conclusion(
    *, version_id: int, by: User, conclusion: str, text: str, edits: int | None
) -> InterpretationVersion:
    """Identity by infrared complies, does not comply, or is inconclusive; kept with the draft until it is submitted."""
    text = bounded(text, field="conclusion_text")
    with unit_of_work():
        version = _editable(version_id, by, edits)
        _judge_conclusion(version, conclusion, text)
        old = {"conclusion": version.conclusion, "text": version.conclusion_text}
        version.conclusion, version.conclusion_text = conclusion, text
        _edited(version, by, ContributionKind.CONCLUDED)
        record(
            Event.INTERPRETATION_CONCLUSION_WRITTEN,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number},
            old=old,
            new={"conclusion": conclusion, "text": text},
        )
    return version


def _judge_conclusion(version: InterpretationVersion, conclusion: str, text: str) -> None:
    if conclusion not in Conclusion.values:
        raise BadInput("conclusion.choice", "Choose complies, does not comply or inconclusive.", field="conclusion")
    identity = version.claims.filter(kind=ClaimKind.IDENTITY).first()
    if conclusion == Conclusion.COMPLIES and (identity is None or identity.verdict not in CONSISTENT):
        words = verdict_words("identity", identity.verdict) if identity else "missing"
        raise BadInput(
            "conclusion.identity_not_consistent",
            f"The identity claim is “{words}”, so the test cannot comply.",
            remedy="Conclude inconclusive or does not comply, or change the identity claim and say why.",
            field="conclusion",
        )
    if conclusion != Conclusion.COMPLIES and not text:
        raise BadInput("conclusion.no_text", "Say what the conclusion rests on.", field="conclusion_text")


def preview(version: InterpretationVersion) -> tuple[list, dict, str]:
    """What submitting would sign now: the points, the document and its hash. Refuses while something is open."""
    open_claims = [claim.title for claim in version.claims.all() if claim.status == ClaimStatus.PROPOSED]
    if open_claims:
        raise NotPossible(
            "interpretation.claims_open",
            f"{len(open_claims)} claim{'s are' if len(open_claims) > 1 else ' is'} neither confirmed nor changed: "
            + ", ".join(open_claims[:6])
            + (" and others." if len(open_claims) > 6 else "."),
            remedy="Confirm or change each of them on the bench.",
        )
    if not version.conclusion:
        raise NotPossible(
            "interpretation.no_conclusion", "The conclusion is not written yet.", remedy="Write it on the bench."
        )
    waiting = version.interpretation.examination.uploads.filter(state="needs_answer")
    if waiting.exists():
        raise NotPossible(
            "interpretation.upload_waits",
            f"{waiting.first().file_name} still waits for an answer.",
            remedy="Answer the question on the sample's page.",
        )
    _judge_evidence(version)
    points = selectors.draft_points(version)
    document = content.content_of(version, points)
    return points, document, content.hash_of(content.canonical(document))


def _judge_evidence(version: InterpretationVersion) -> None:
    """A version is signed on the newest analysis of the spectrum that decides, never on one that was replaced."""
    examination = version.interpretation.examination
    decisive = spectra_selectors.decisive_spectrum(examination)
    if decisive is None:
        raise NotPossible(
            "interpretation.no_decisive_spectrum",
            "No spectrum of this examination is decisive any more.",
            remedy="Make one decisive on the sample's page.",
        )
    newest = spectra_selectors.latest_analysis(decisive)
    if newest is None or newest.pk != version.analysis_id:
        raise NotPossible(
            "interpretation.analysis_waits",
            "The decisive spectrum has an analysis that these claims do not rest on yet.",
            remedy="Wait until it is done, or try it again if it failed.",
        )


def submit(*, version_id: int, by: User, proof: SigningProof, content_hash: str) -> InterpretationVersion:
    """Cut the version: its content is frozen under its hash and signed, its points are frozen with it."""
    with unit_of_work():
        # With the examination held no upload can add a spectrum to what is being signed.
        version = locked(version_id)
        state = permissions.require(by, version, Action.SUBMIT)
        points, document, actual = preview(version)
        _judge_conclusion(version, version.conclusion, version.conclusion_text)
        if actual != content_hash:
            raise Stale(
                "interpretation.changed",
                "The interpretation changed since the hash you saw was made.",
                remedy="Look at it again, then sign.",
            )
        # After the document was made: it lists who had a hand in it before, and the signature adds who signs.
        contribute(examination=version.interpretation.examination, user=by, kind=ContributionKind.CONCLUDED)
        signature = signing.sign(
            proof=proof,
            by=by,
            kind="interpretation",
            subject_id=str(version.pk),
            content_hash=actual,
            meaning=Meaning.PERFORMED,
            label=label_of(version),
        )
        _freeze_points(version, points)
        version.content = content.canonical(document)
        version.content_hash = actual
        version.state = state
        version.submitted_by, version.submitted_at, version.submission = by, timezone.now(), signature
        version.save()
        record(
            Event.INTERPRETATION_SUBMITTED,
            by=by,
            subject=subject_of(version),
            facts={
                "version": version.number,
                "content_hash": actual,
                "conclusion": version.conclusion,
                "points": [point.key for point in points],
            },
        )
    return version


def _freeze_points(version: InterpretationVersion, points: list) -> None:
    claims: Mapping[str, Claim] = {claim.key: claim for claim in version.claims.all()}
    MustSeePoint.objects.bulk_create(
        MustSeePoint(
            version=version,
            key=point.key,
            kind=point.kind,
            title=point.title,
            detail=point.detail,
            claim=claims.get(point.claim_key) if point.claim_key else None,
            region_low_cm1=point.region_cm1[0] if point.region_cm1 else None,
            region_high_cm1=point.region_cm1[1] if point.region_cm1 else None,
            comment_required=point.comment_required,
            sort=sort,
        )
        for sort, point in enumerate(points)
    )


def revise(*, version_id: int, by: User, reason: str) -> InterpretationVersion:
    """A new draft after a decision: what the analyst stated comes along, no confirmation by a reviewer ever does."""
    reason = bounded(reason, field="reason")
    if not reason:
        raise BadInput("revision.no_reason", "Say what is to be revised.", field="reason")
    with unit_of_work():
        earlier = locked(version_id)
        permissions.require(by, earlier, Action.REVISE)
        interpretation = Interpretation.objects.select_for_update(no_key=True).get(pk=earlier.interpretation_id)
        last = interpretation.versions.order_by("-number").first()
        if last.pk != earlier.pk:
            raise NotPossible(
                "interpretation.revised_already",
                f"Version {last.number} has taken this one's place.",
                version=last.number,
            )
        version = InterpretationVersion.objects.create(
            interpretation=interpretation,
            number=earlier.number + 1,
            analysis=earlier.analysis,
            revises=earlier,
            opened_by=by,
            opened_at=timezone.now(),
            conclusion=earlier.conclusion,
            conclusion_text=earlier.conclusion_text,
        )
        for claim in earlier.claims.all():
            claim.pk, claim.version = None, version
            claim._state.adding = True
            claim.save()
        contribute(examination=interpretation.examination, user=by, kind=ContributionKind.CLAIMED)
        record(
            Event.INTERPRETATION_REVISED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "revises": earlier.number},
            reason=reason,
        )
    return version
