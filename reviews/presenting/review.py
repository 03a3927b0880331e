"""The second reading: points and verdicts side by side, for review.html and its parts."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from django.urls import reverse

from labsite.accounts.models import User
from reviews import permissions, selectors
from reviews.models import ClaimKind, ClaimStatus, InterpretationVersion, Judgement, MustSeePoint
from reviews.presenting.bench import positions_by_group
from reviews.transitions import Action
from spectra.models import Examination

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
    "same_file": "same measurement",
    "revision": "revision",
    "conclusion": "conclusion",
}


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
