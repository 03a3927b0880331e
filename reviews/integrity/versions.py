"""Every interpretation version against its signatures, its signed document, its rows, and its way in the trail."""

from __future__ import annotations

from collections.abc import Iterator

from django.core.exceptions import ObjectDoesNotExist

from labsite.signing.models import Meaning, Signature
from labsite.trail.verify import Damage
from reviews.integrity import readings, signed
from reviews.models import InterpretationVersion, Verdict
from reviews.transitions import DECIDED_STATES, State
from spectra.integrity.rows import careful, each_row, settled

ROWS = InterpretationVersion.objects.select_related(
    "submission",
    "revises",
    "analysis__spectrum__upload__raw_file",
    "analysis__method",
    "analysis__group_table",
    "analysis__reference__raw_file",
    "analysis__watch_list",
    "interpretation__examination__delivery__material_version__material",
    "interpretation__examination__procedure",
    "decision",
    "withdrawal",
).prefetch_related("claims", "points", "interpretation__examination__contributions")


def damaged_interpretations() -> Iterator[Damage]:
    """Every version, and every signature on one that no version carries."""
    # The signatures first: what is signed meanwhile is then in the versions at worst, never missing from them.
    made = list(Signature.objects.filter(kind="interpretation").order_by("pk").values_list("pk", "subject_id"))
    used: set[int] = set()
    yield from each_row(ROWS, "interpretation version", lambda row: _checked(row, used))
    for pk, subject in made:
        if pk not in used:
            yield Damage(f"signature {pk}", f"What it signed on interpretation version {subject} is gone.")


def _checked(row: InterpretationVersion, used: set[int]) -> list[Damage]:
    """What is wrong with one version; where something seems to be, as it stands now."""
    found = list(_damages(row, used))
    return settled(lambda: _damages(ROWS.get(pk=row.pk), used)) if found else found


def _damages(row: InterpretationVersion, used: set[int]) -> Iterator[Damage]:
    where = f"interpretation {row}"
    history = readings.history_of(row)
    if row.state == State.DRAFT:
        if row.content is not None or row.submission_id is not None or row.content_hash:
            yield Damage(where, "It was submitted, and was made a draft again.")
            used.add(row.submission_id)
        yield from readings.damages(row, where, history)
        return
    later = list(row.interpretation.versions.filter(number__gt=row.number).values_list("number", "decision__verdict"))
    document: dict = {}
    try:
        document = signed.document_of(row)
    except signed.Unreadable as problem:
        yield Damage(where, str(problem))
    else:
        yield from careful(where, signed.damages(row, where, document, later=bool(later)))
    yield from careful(where, _signature_damages(row, where, used))
    yield from careful(where, _state_damages(row, where, later))
    yield from careful(where, _own_work(row, where, document))
    yield from readings.damages(row, where, history)


def _signature_damages(row: InterpretationVersion, where: str, used: set[int]) -> Iterator[Damage]:
    decision, withdrawal = getattr(row, "decision", None), getattr(row, "withdrawal", None)
    expected = [("submission", row, "submission", Meaning.PERFORMED, row.submitted_by_id)]
    if decision is not None:
        expected.append(("decision", decision, "signature", Meaning.REVIEWED, decision.by_id))
    if withdrawal is not None:
        expected.append(("withdrawal", withdrawal, "signature", Meaning.WITHDRAWN, withdrawal.by_id))
    for noun, holder, name, meaning, signer in expected:
        signature = _related(holder, name)
        if signature is None:
            yield Damage(where, f"Its {noun} is not signed.")
            continue
        used.add(signature.pk)
        if signature.content_hash != row.content_hash:
            yield Damage(where, f"Its {noun} is not signed over this content.")
        about = (signature.kind, signature.subject_id, signature.meaning, signature.signer_id)
        if about != ("interpretation", str(row.pk), meaning, signer):
            yield Damage(where, f"Its {noun} carries a signature that was made for something else.")


def _related(holder: object, name: str) -> Signature | None:
    try:
        return getattr(holder, name)
    except ObjectDoesNotExist:  # it was deleted under the row that names it
        return None


FOLLOWS = {
    Verdict.APPROVED: (State.APPROVED, State.WITHDRAWN, State.SUPERSEDED),
    Verdict.REJECTED: (State.REJECTED,),
}


def _state_damages(row: InterpretationVersion, where: str, later: list[tuple[int, str | None]]) -> Iterator[Damage]:
    state, decision = State(row.state), getattr(row, "decision", None)
    if decision is None:
        if state in DECIDED_STATES:
            yield Damage(where, f"It is {row.get_state_display()} without a signed decision.")
        return
    if state not in FOLLOWS.get(decision.verdict, ()):
        yield Damage(where, "Its state does not follow from its decision.")
    if (state is State.WITHDRAWN) != hasattr(row, "withdrawal"):
        yield Damage(where, "Its state does not follow from its withdrawal.")
    if state is State.SUPERSEDED and Verdict.APPROVED not in [verdict for _, verdict in later]:
        yield Damage(where, "It is superseded, and no later version was approved.")


def _own_work(row: InterpretationVersion, where: str, document: dict) -> Iterator[Damage]:
    """Neither the rows of today nor what was signed may name whoever decided among those who had a hand in it."""
    decision = getattr(row, "decision", None)
    if decision is None:
        return
    hands = {contribution.user_id for contribution in row.interpretation.examination.contributions.all()}
    hands |= {row.submitted_by_id, *document.get("contributors", ())}
    if (submission := _related(row, "submission")) is not None:
        hands.add(submission.signer_id)
    deciders = {decision.by_id}
    if (signature := _related(decision, "signature")) is not None:
        deciders.add(signature.signer_id)
    if hands & deciders:
        yield Damage(where, "It was decided by somebody whose own work it is.")
