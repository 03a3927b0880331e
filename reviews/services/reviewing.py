"""The reviewer's side: take, open and judge each point, settle disagreements, decide; QA's withdrawal."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta

from django.conf import settings
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import BadInput, NotPossible, NotVisible, Stale
from labsite.signing import services as signing
from labsite.signing.models import Meaning
from labsite.signing.services import SigningProof
from labsite.trail.events import Event
from labsite.trail.record import record, unit_of_work
from reviews import content, permissions, selectors
from reviews.models import (
    Decision,
    InterpretationVersion,
    Judgement,
    MustSeePoint,
    ReviewRead,
    Verdict,
    Withdrawal,
)
from reviews.services import second_reading
from reviews.services.drafts import label_of, locked, subject_of
from reviews.transitions import WITH_REVIEWER, Action, State, next_state
from spectra.models import ContributionKind
from spectra.services.receiving import contribute
from spectra.services.texts import bounded


def take(*, version_id: int, by: User) -> InterpretationVersion:
    """Take a proposal for review. Others see who has it; it goes back by itself when the time for it is up."""
    with unit_of_work():
        version = locked(version_id)
        version.state = permissions.require(by, version, Action.TAKE)
        version.taken_by, version.taken_at = by, timezone.now()
        version.save()
        record(Event.INTERPRETATION_TAKEN, by=by, subject=subject_of(version), facts={"version": version.number})
    return version


def hand_back(*, version_id: int, by: User) -> InterpretationVersion:
    with unit_of_work():
        version = locked(version_id)
        version.state = permissions.require(by, version, Action.HAND_BACK)
        version.taken_by = version.taken_at = None
        version.save()
        record(Event.INTERPRETATION_HANDED_BACK, by=by, subject=subject_of(version), facts={"version": version.number})
    return version


def return_overdue() -> int:
    """Give back what a reviewer has held for longer than the laboratory allows. Returns how many."""
    limit = timezone.now() - timedelta(hours=settings.REVIEW_HOURS)
    overdue = InterpretationVersion.objects.filter(state__in=[str(s) for s in WITH_REVIEWER], taken_at__lt=limit)
    returned = 0
    for pk in list(overdue.values_list("pk", flat=True)[:100]):
        with unit_of_work():
            version = locked(pk)
            if State(version.state) not in WITH_REVIEWER or version.taken_at is None or version.taken_at >= limit:
                continue
            version.state = next_state(State(version.state), Action.TIME_OUT)
            version.taken_by = version.taken_at = None
            version.save()
            record(
                Event.INTERPRETATION_TIMED_OUT,
                by=None,
                subject=subject_of(version),
                facts={"version": version.number, "hours": settings.REVIEW_HOURS},
            )
            returned += 1
    return returned


def _point(version: InterpretationVersion, point_id: int) -> MustSeePoint:
    point = version.points.filter(pk=point_id).first()
    if point is None:
        raise NotVisible("point.unknown", "There is no such point in this version.")
    return point


def open_point(*, version_id: int, point_id: int, by: User) -> ReviewRead:
    """Note that the reviewer opened the point, the first time they do."""
    with unit_of_work():
        version = locked(version_id)
        permissions.require(by, version, Action.OPEN_POINT)
        point = _point(version, point_id)
        read, fresh = ReviewRead.objects.get_or_create(point=point, reviewer=by, defaults={"opened_at": timezone.now()})
        if fresh:
            record(
                Event.INTERPRETATION_POINT_OPENED,
                by=by,
                subject=subject_of(version),
                facts={"version": version.number, "point": point.key},
            )
    return read


def judge_point(*, version_id: int, point_id: int, by: User, judgement: str, comment: str) -> ReviewRead:
    """Agree or disagree with a point that was opened. A disagreement, or an override, needs a comment."""
    comment = bounded(comment, field="comment")
    with unit_of_work():
        version = locked(version_id)
        permissions.require(by, version, Action.OPEN_POINT)
        point = _point(version, point_id)
        read = ReviewRead.objects.select_for_update().filter(point=point, reviewer=by).first()
        if read is None:
            raise NotPossible("point.not_opened", "Open the point first.")
        if judgement not in Judgement.values:
            raise BadInput("point.judgement", "Choose agree or disagree.", field="judgement")
        if not comment and (judgement == Judgement.DISAGREE or point.comment_required):
            raise BadInput(
                "point.no_comment",
                "Write what you saw: a comment is required on an override and on a disagreement.",
                field="comment",
            )
        if read.judgement == Judgement.DISAGREE and not read.settled_at and judgement == Judgement.DISAGREE:
            raise NotPossible("point.disagreed_already", "Your disagreement stands; it waits to be settled.")
        old = {"judgement": read.judgement, "comment": read.comment}
        if read.settled_at:  # what was settled is taken up again: it has to be answered and settled anew
            old |= {"answer": read.answer, "settlement": read.settlement}
            read.answer = read.settlement = ""
            read.answered_by = read.answered_at = read.settled_at = None
        read.judgement, read.comment, read.judged_at = judgement, comment, timezone.now()
        read.save()
        event = (
            Event.INTERPRETATION_DISAGREEMENT_WRITTEN
            if judgement == Judgement.DISAGREE
            else Event.INTERPRETATION_POINT_JUDGED
        )
        record(
            event,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "point": point.key},
            old=old,
            new={"judgement": judgement, "comment": comment},
        )
    return read


def answer_disagreement(*, version_id: int, point_id: int, by: User, answer: str) -> ReviewRead:
    """The analyst's written answer to a reviewer's disagreement."""
    answer = bounded(answer, field="answer")
    with unit_of_work():
        version = locked(version_id)
        permissions.require(by, version, Action.ANSWER)
        read = _disagreement(version, point_id)
        if read.settled_at:
            raise NotPossible("point.settled", "This disagreement is settled.")
        if not answer:
            raise BadInput("point.no_answer", "Write the answer.", field="answer")
        old = {"answer": read.answer}
        read.answer, read.answered_by, read.answered_at = answer, by, timezone.now()
        read.save()
        contribute(examination=version.interpretation.examination, user=by, kind=ContributionKind.ANSWERED)
        record(
            Event.INTERPRETATION_DISAGREEMENT_ANSWERED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "point": read.point.key},
            old=old,
            new={"answer": answer},
        )
    return read


def settle_disagreement(*, version_id: int, point_id: int, by: User, settlement: str) -> ReviewRead:
    """The reviewer writes how an answered disagreement was settled; without an answer there is nothing to settle."""
    settlement = bounded(settlement, field="settlement")
    with unit_of_work():
        version = locked(version_id)
        permissions.require(by, version, Action.OPEN_POINT)
        read = _disagreement(version, point_id)
        if read.settled_at:
            raise NotPossible("point.settled", "This disagreement is settled.")
        if not read.answer:
            raise NotPossible("point.not_answered", "The analyst has not answered yet.")
        if not settlement:
            raise BadInput("point.no_settlement", "Write how it was settled.", field="settlement")
        read.settlement, read.settled_at = settlement, timezone.now()
        read.save()
        record(
            Event.INTERPRETATION_DISAGREEMENT_SETTLED,
            by=by,
            subject=subject_of(version),
            facts={"version": version.number, "point": read.point.key},
            new={"settlement": settlement},
        )
    return read


def _disagreement(version: InterpretationVersion, point_id: int) -> ReviewRead:
    point = _point(version, point_id)
    read = (
        ReviewRead.objects.select_for_update()
        .filter(point=point, reviewer=version.taken_by_id, judgement=Judgement.DISAGREE)
        .first()
    )
    if read is None:
        raise NotPossible("point.no_disagreement", "Nobody disagrees about this point.")
    return read


def approve(*, version_id: int, by: User, proof: SigningProof, content_hash: str, comment: str = "") -> Decision:
    """Approve over the hash that was shown: every point opened and judged, every disagreement settled."""
    comment = bounded(comment, field="comment")
    with unit_of_work():
        version = locked(version_id)
        state = permissions.require(by, version, Action.APPROVE)
        _judge_hash(version, content_hash)
        blockers = selectors.approval_blockers(version, by)
        if blockers:
            raise NotPossible("interpretation.not_reviewed", " ".join(blockers), remedy="See to these, then sign.")
        _supersede_earlier(version, by)
        return _decide(version, state, Verdict.APPROVED, by=by, proof=proof, comment=comment, reasons=[])


def reject(
    *, version_id: int, by: User, proof: SigningProof, content_hash: str, reasons: Sequence[dict[str, str]]
) -> Decision:
    """Send it back. Needs at least one reason, each for a point or for the whole, and nothing else."""
    with unit_of_work():
        version = locked(version_id)
        state = permissions.require(by, version, Action.REJECT)
        _judge_hash(version, content_hash)
        keys = set(version.points.values_list("key", flat=True)) | {""}
        given = [
            {"point": reason.get("point", ""), "text": bounded(reason.get("text", ""), field="reason")}
            for reason in reasons
            if reason.get("text", "").strip()
        ]
        if not given:
            raise BadInput(
                "rejection.no_reason", "Give at least one reason: the analyst has to know what to mend.", field="reason"
            )
        if any(reason["point"] not in keys for reason in given):
            raise BadInput(
                "rejection.unknown_point", "A reason names a point that is not in this version.", field="reason"
            )
        return _decide(version, state, Verdict.REJECTED, by=by, proof=proof, comment="", reasons=given)


def _judge_hash(version: InterpretationVersion, content_hash: str) -> None:
    if content_hash != version.content_hash:
        raise Stale(
            "interpretation.changed",
            "The page showed another version than the one that waits.",
            remedy="Open it again.",
        )
    if content.hash_of(bytes(version.content)) != version.content_hash:
        raise NotPossible(
            "interpretation.altered",
            "The stored content no longer fits the hash that was signed. Nothing can be decided on it.",
            remedy="Tell the QA manager; the trail verification names what was altered.",
        )


def _decide(
    version: InterpretationVersion,
    state: State,
    verdict: str,
    *,
    by: User,
    proof: SigningProof,
    comment: str,
    reasons: list[dict[str, str]],
) -> Decision:
    signature = signing.sign(
        proof=proof,
        by=by,
        kind="interpretation",
        subject_id=str(version.pk),
        content_hash=version.content_hash,
        meaning=Meaning.REVIEWED,
        label=label_of(version),
    )
    decision = Decision.objects.create(
        version=version,
        verdict=verdict,
        by=by,
        at=timezone.now(),
        comment=comment,
        reasons=reasons,
        signature=signature,
    )
    version.state = state
    version.save(update_fields=["state"])
    record(
        Event.INTERPRETATION_APPROVED if verdict == Verdict.APPROVED else Event.INTERPRETATION_REJECTED,
        by=by,
        subject=subject_of(version),
        facts={
            "version": version.number,
            "content_hash": version.content_hash,
            "conclusion": version.conclusion,
            "reasons": reasons,
            "decided_at": decision.at,
            "review_sha256": second_reading.digest_of_decision(decision),
        },
        reason=comment,
    )
    return decision


def _supersede_earlier(version: InterpretationVersion, by: User) -> None:
    earlier = version.interpretation.versions.select_for_update(no_key=True).filter(state=State.APPROVED).first()
    if earlier is None:
        return
    earlier.state = next_state(State(earlier.state), Action.SUPERSEDE)
    earlier.save(update_fields=["state"])
    record(
        Event.INTERPRETATION_SUPERSEDED,
        by=by,
        subject=subject_of(earlier),
        facts={"version": earlier.number, "by_version": version.number},
    )


def withdraw(*, version_id: int, by: User, proof: SigningProof, content_hash: str, reason: str) -> Withdrawal:
    """QA takes an approved version out of effect, with a reason and a signature; it stays readable for ever."""
    reason = bounded(reason, field="reason")
    with unit_of_work():
        version = locked(version_id)
        state = permissions.require(by, version, Action.WITHDRAW)
        _judge_hash(version, content_hash)
        if not reason:
            raise BadInput("withdrawal.no_reason", "Say why the approved version is withdrawn.", field="reason")
        signature = signing.sign(
            proof=proof,
            by=by,
            kind="interpretation",
            subject_id=str(version.pk),
            content_hash=version.content_hash,
            meaning=Meaning.WITHDRAWN,
            label=label_of(version),
        )
        withdrawal = Withdrawal.objects.create(
            version=version, by=by, at=timezone.now(), reason=reason, signature=signature
        )
        version.state = state
        version.save(update_fields=["state"])
        record(
            Event.INTERPRETATION_WITHDRAWN,
            by=by,
            subject=subject_of(version),
            facts={
                "version": version.number,
                "content_hash": version.content_hash,
                "withdrawn_at": withdrawal.at,
                "review_sha256": second_reading.digest_of_withdrawal(withdrawal),
            },
            reason=reason,
        )
    return withdrawal
