"""The second reading against the trail: where a version stands, what its reviewers read, and what was decided."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from labsite.trail import canonical
from labsite.trail.events import Event
from labsite.trail.verify import Damage
from reviews.models import InterpretationVersion, ReviewRead, Verdict
from reviews.services import second_reading
from reviews.transitions import STATE_WORDS, State
from spectra.integrity.rows import Told, careful, differing, told

STATE_AFTER = {
    Event.INTERPRETATION_SUBMITTED: State.SUBMITTED,
    Event.INTERPRETATION_TAKEN: State.IN_REVIEW,
    Event.INTERPRETATION_BLIND_RECORDED: State.IN_REVIEW,
    Event.INTERPRETATION_HANDED_BACK: State.SUBMITTED,
    Event.INTERPRETATION_TIMED_OUT: State.SUBMITTED,
    Event.INTERPRETATION_APPROVED: State.APPROVED,
    Event.INTERPRETATION_REJECTED: State.REJECTED,
    Event.INTERPRETATION_WITHDRAWN: State.WITHDRAWN,
    Event.INTERPRETATION_SUPERSEDED: State.SUPERSEDED,
}
VERDICT_OF = {Event.INTERPRETATION_APPROVED: Verdict.APPROVED, Event.INTERPRETATION_REJECTED: Verdict.REJECTED}
READING = (
    Event.INTERPRETATION_POINT_OPENED,
    Event.INTERPRETATION_POINT_JUDGED,
    Event.INTERPRETATION_DISAGREEMENT_WRITTEN,
    Event.INTERPRETATION_DISAGREEMENT_ANSWERED,
    Event.INTERPRETATION_DISAGREEMENT_SETTLED,
)


def history_of(row: InterpretationVersion) -> list[Told]:
    """What the trail tells of one version's way and of its readings, oldest first."""
    subject = ("examination", str(row.interpretation.examination_id))
    return [e for e in told(*STATE_AFTER, *READING, subject=subject) if e.facts.get("version") == row.number]


def damages(row: InterpretationVersion, where: str, history: list[Told]) -> Iterator[Damage]:
    yield from careful(where, _state(row, where, history))
    yield from careful(where, _decision(row, where, history))
    yield from careful(where, _withdrawal(row, where, history))
    yield from careful(where, _reads(row, where, history))


def _state(row: InterpretationVersion, where: str, history: list[Told]) -> Iterator[Damage]:
    """The newest event decides where the version stands."""
    state = State.DRAFT
    for entry in history:
        state = STATE_AFTER.get(entry.event, state)
    if row.state != state:
        yield Damage(where, f"It should be {STATE_WORDS[state]}: so the trail says.")


def _decision(row: InterpretationVersion, where: str, history: list[Told]) -> Iterator[Damage]:
    entry = next((entry for entry in reversed(history) if entry.event in VERDICT_OF), None)
    decision = getattr(row, "decision", None)
    if entry is None or decision is None:
        yield from _one_missing(entry, decision, where, "decided", "decision")
        return
    promised = {"verdict": VERDICT_OF[entry.event], "by": entry.actor_id, "comment": entry.reason, **_kept(entry)}
    shown = {
        "verdict": decision.verdict,
        "by": decision.by_id,
        "comment": decision.comment,
        "reasons": decision.reasons,
        "decided_at": decision.at,
    }
    yield from _against(entry, f"{where}, decision", promised, shown)
    yield from _digest(entry, where, lambda: second_reading.digest_of_decision(decision))


def _one_missing(entry: Told | None, act: object | None, where: str, done: str, noun: str) -> Iterator[Damage]:
    """The act without its entry, or the entry without its act; nothing where there is neither."""
    if entry is not None:
        yield Damage(where, f"Entry {entry.seq} says that it was {done}; the {noun} is gone.")
    elif act is not None:
        yield Damage(where, f"No entry of the trail says that it was {done}.")


def _withdrawal(row: InterpretationVersion, where: str, history: list[Told]) -> Iterator[Damage]:
    entry = next((entry for entry in reversed(history) if entry.event == Event.INTERPRETATION_WITHDRAWN), None)
    withdrawal = getattr(row, "withdrawal", None)
    if entry is None or withdrawal is None:
        yield from _one_missing(entry, withdrawal, where, "withdrawn", "withdrawal")
        return
    promised = {"by": entry.actor_id, "reason": entry.reason, **_kept(entry)}
    shown = {"by": withdrawal.by_id, "reason": withdrawal.reason, "withdrawn_at": withdrawal.at}
    yield from _against(entry, f"{where}, withdrawal", promised, shown)
    yield from _digest(entry, where, lambda: second_reading.digest_of_withdrawal(withdrawal))


def _kept(entry: Told) -> dict[str, object]:
    return {name: entry.facts[name] for name in ("reasons", "decided_at", "withdrawn_at") if name in entry.facts}


def _against(entry: Told, where: str, promised: dict, shown: dict) -> Iterator[Damage]:
    """Entries made before a fact was kept do not speak of it."""
    if names := differing(promised, {name: value for name, value in shown.items() if name in promised}):
        yield Damage(where, f"It differs from what entry {entry.seq} recorded: {names}.")


def _digest(entry: Told, where: str, digest: Callable[[], str]) -> Iterator[Damage]:
    if "review_sha256" in entry.facts and digest() != entry.facts["review_sha256"]:
        yield Damage(where, f"Its second reading does not give the hash that entry {entry.seq} recorded.")


def _reads(row: InterpretationVersion, where: str, history: list[Told]) -> Iterator[Damage]:
    """Every point that somebody opened, with what they made of it, against the entries of each step."""
    was = _told_reads(history)
    rows = ReviewRead.objects.filter(point__version=row).select_related("point")
    shown = {(canonical.clean_text(read.point.key), read.reviewer_id): _shown(read) for read in rows}
    for key, reviewer in sorted(was.keys() | shown.keys(), key=str):
        place, pair = f"{where}, point {key}", (key, reviewer)
        if pair not in shown:
            yield Damage(place, f"What account {reviewer} read there is gone.")
        elif pair not in was:
            yield Damage(place, f"No entry of the trail says that account {reviewer} opened it.")
        elif names := differing(was[pair], shown[pair]):
            yield Damage(place, f"What account {reviewer} made of it differs from what the trail recorded: {names}.")


def _shown(read: ReviewRead) -> dict[str, object]:
    return {
        "judgement": read.judgement,
        "comment": read.comment,
        "answer": read.answer,
        "answered_by": read.answered_by_id,
        "settlement": read.settlement,
    }


def _told_reads(history: list[Told]) -> dict[tuple[str, int], dict[str, object]]:
    """Each point's reading by each reviewer, put together from the steps in their order."""
    reads: dict[tuple[str, int], dict[str, object]] = {}
    holder = None  # whoever has taken the version: an answer is given to them
    nothing = {"judgement": "", "comment": "", "answer": "", "answered_by": None, "settlement": ""}
    for entry in history:
        if entry.event == Event.INTERPRETATION_TAKEN:
            holder = entry.actor_id
        if entry.event not in READING:
            continue
        answered = entry.event == Event.INTERPRETATION_DISAGREEMENT_ANSWERED
        read = reads.setdefault((entry.facts["point"], holder if answered else entry.actor_id), dict(nothing))
        if "settlement" in entry.old:  # a settled disagreement was taken up again
            read.update(answer="", answered_by=None, settlement="")
        read.update(entry.new)
        if answered:
            read["answered_by"] = entry.actor_id
    return reads
