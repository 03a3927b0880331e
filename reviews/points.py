"""The points a reviewer must open before signing, from the claims and the facts around them. Pure and frozen.

They are computed once, at submission, over what is being submitted. An uneventful lot has at most two.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from reviews.words import verdict_words

MAX_TITLE_CHARACTERS = 300


@dataclass(frozen=True)
class StatedClaim:
    """A claim as it stands at submission: what was computed and what the analyst says."""

    key: str
    kind: str
    title: str
    computed_verdict: str
    verdict: str
    agrees: str
    status: str
    text: str
    reason: str
    must_see: bool
    expected: bool = False
    hazard: str = ""
    region_cm1: tuple[float, float] | None = None


@dataclass(frozen=True)
class Surroundings:
    """What else bears on the decision, as facts in words: each non-empty entry is a point of its own."""

    check: str = ""  # the instrument check is missing, failed or expired
    reference: str = ""  # the reference is missing, expired or of another technique
    excluded: tuple[str, ...] = ()  # excluded spectra with their reasons
    departures: tuple[str, ...] = ()  # departures from the written procedure
    same_file: str = ""  # the same bytes stand for another sample too
    reruns: tuple[str, ...] = ()
    earlier: str = ""  # what changed since the version before


@dataclass(frozen=True)
class DraftPoint:
    """One must-see point. `claim_key` links it to its claim, `region_cm1` to the plot."""

    key: str
    kind: str
    title: str
    detail: str
    claim_key: str | None = None
    comment_required: bool = False
    region_cm1: tuple[float, float] | None = None


def must_see_points(
    *, claims: Sequence[StatedClaim], conclusion: str, conclusion_text: str, around: Surroundings
) -> list[DraftPoint]:
    """All points of one proposal, overrides and contradictions first."""
    points: list[DraftPoint] = []
    points += [_override(claim) for claim in claims if claim.status == "changed"]
    points += [_added(claim) for claim in claims if claim.status == "added"]
    points += [_contradiction(claim) for claim in claims if claim.status == "confirmed" and claim.agrees == "no"]
    points += _open(claims, conclusion)
    points += [_hazard(claim) for claim in claims if claim.hazard]
    if around.check:
        points.append(DraftPoint("check", "instrument_check", "Instrument check", around.check))
    if around.reference:
        points.append(DraftPoint("reference", "reference", "Reference", around.reference))
    if around.departures:
        points.append(
            DraftPoint("departures", "procedure", "Departures from the procedure", " ".join(around.departures))
        )
    if around.same_file:
        points.append(DraftPoint("same_file", "same_file", "The same file as another sample", around.same_file))
    for number, text in enumerate(around.excluded, start=1):
        points.append(DraftPoint(f"excluded:{number}", "excluded", "Excluded spectrum", text))
    for number, text in enumerate(around.reruns, start=1):
        points.append(DraftPoint(f"rerun:{number}", "rerun", "Measured again", text))
    if around.earlier:
        points.append(DraftPoint("earlier", "revision", "What changed since the version before", around.earlier))
    points.append(
        DraftPoint(
            "conclusion",
            "conclusion",
            f"Conclusion: {conclusion.replace('_', ' ')}",
            conclusion_text or "The analyst wrote no comment.",
        )
    )
    return [replace(point, title=point.title[:MAX_TITLE_CHARACTERS]) for point in points]


def _override(claim: StatedClaim) -> DraftPoint:
    computed = verdict_words(claim.kind, claim.computed_verdict)
    stated = verdict_words(claim.kind, claim.verdict)
    return DraftPoint(
        key=f"override:{claim.key}",
        kind="override",
        title=f"Override: {claim.title} set to {stated}",
        detail=f"Computed: {computed}. {claim.text} The analyst's reason: {claim.reason}",
        claim_key=claim.key,
        comment_required=True,
        region_cm1=claim.region_cm1,
    )


def _added(claim: StatedClaim) -> DraftPoint:
    return DraftPoint(
        key=f"added:{claim.key}",
        kind="added",
        title=f"Added by the analyst: {claim.title}, {verdict_words(claim.kind, claim.verdict)}",
        detail=claim.reason,
        claim_key=claim.key,
        region_cm1=claim.region_cm1,
    )


def _contradiction(claim: StatedClaim) -> DraftPoint:
    return DraftPoint(
        key=f"contradiction:{claim.key}",
        kind="contradiction",
        title=f"{claim.title}: {verdict_words(claim.kind, claim.verdict)}",
        detail=f"Against the declaration. {claim.text}",
        claim_key=claim.key,
        region_cm1=claim.region_cm1,
    )


def _open(claims: Sequence[StatedClaim], conclusion: str) -> list[DraftPoint]:
    """What stays open although the conclusion leans on it: measurement limits, impurities not seen, undecided groups.

    Undecided groups that the declaration expects share one point, and so do contaminants that cannot be seen: one
    glance settles them together.
    """
    points = []
    unseen = [claim for claim in claims if _is_open(claim) and claim.verdict == "cannot_be_seen"]
    if unseen:
        names = ", ".join(claim.title for claim in unseen)
        points.append(
            DraftPoint(
                key="unseen",
                kind="impurity",
                title=f"Cannot be seen here: {names}",
                detail="\n".join(dict.fromkeys(claim.text for claim in unseen)),
                claim_key=unseen[0].key,
            )
        )
    for claim in claims:
        if not _is_open(claim) or claim.kind == "group" or claim in unseen:
            continue
        if claim.must_see:
            points.append(
                DraftPoint(
                    key=f"open:{claim.key}",
                    kind=claim.kind,
                    title=f"{claim.title}: {verdict_words(claim.kind, claim.verdict)}",
                    detail=claim.text,
                    claim_key=claim.key,
                    region_cm1=claim.region_cm1,
                )
            )
    undecided = [claim for claim in claims if claim.kind == "group" and claim.expected and _is_open(claim)]
    if undecided and conclusion == "complies":
        points.append(
            DraftPoint(
                key="undecided",
                kind="undecided",
                title=f"{len(undecided)} expected group{'s' if len(undecided) > 1 else ''} undecided",
                detail="\n".join(f"{claim.title}: {claim.text}" for claim in undecided),
                claim_key=undecided[0].key,
            )
        )
    return points


def _is_open(claim: StatedClaim) -> bool:
    return claim.status == "confirmed" and claim.agrees == "neutral"


def _hazard(claim: StatedClaim) -> DraftPoint:
    return DraftPoint(
        key=f"hazard:{claim.key}",
        kind="hazard",
        title=f"Hazard: {claim.title}",
        detail=claim.hazard,
        claim_key=claim.key,
    )
