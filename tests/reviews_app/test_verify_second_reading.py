"""What a reviewer read, judged and decided is bound by a hash in the trail; what was changed afterwards is named."""

from __future__ import annotations

import json

import pytest

from labsite.trail.models import TrailEntry
from labsite.trail.verify import verify
from reviews.models import Decision, InterpretationVersion, ReviewRead
from reviews.services import drafts, reviewing
from tests import builders
from tests.lifting import damages, tamper


def name(version) -> str:
    return f"interpretation {version}"


def named(version) -> set[str]:
    """The last words of what is said of the decision and of each point."""
    return {what.rpartition(": ")[2] for where, found in damages().items() if where != name(version) for what in found}


def no_hash(version) -> bool:
    return any("does not give the hash" in what for what in damages()[name(version)])


@pytest.fixture
def approved(cast, lab, quick_computing):
    """Approved after a disagreement that was answered, settled, taken up again and settled once more."""
    version = builders.taken_version(cast, lab)
    builders.see_everything(version, cast.reviewer)
    point = version.points.get(key="conclusion")
    who = {"version_id": version.pk, "point_id": point.pk}
    for words in ("first", "second"):
        reviewing.judge_point(**who, by=cast.reviewer, judgement="disagree", comment=f"{words} doubt")
        reviewing.answer_disagreement(**who, by=cast.second_analyst, answer=f"{words} answer")
        reviewing.settle_disagreement(**who, by=cast.reviewer, settlement=f"{words} settlement")
    reviewing.approve(
        version_id=version.pk,
        by=cast.reviewer,
        proof=builders.proof_of(cast.reviewer),
        content_hash=version.content_hash,
        comment="All seen.",
    )
    assert verify().ok, verify().damages
    return InterpretationVersion.objects.get(pk=version.pk)


def test_the_entry_of_a_decision_carries_the_hash_of_the_second_reading(approved):
    entry = TrailEntry.objects.get(event="interpretation.approved")
    facts = json.loads(bytes(entry.canonical))["facts"]
    assert len(facts["review_sha256"]) == 64 and facts["decided_at"].endswith("Z")


@pytest.mark.parametrize(
    ("change", "part"),
    [
        ("judgement = 'agree'", "judgement."),
        ("comment = 'none'", "comment."),
        ("answer = 'none'", "answer."),
        ("settlement = 'none'", "settlement."),
    ],
)
def test_a_changed_reading_is_named_by_its_point(approved, change, part):
    tamper(f"UPDATE reviews_reviewread SET {change} WHERE judgement = 'disagree'")
    found = damages()
    assert [what.endswith(f": {part}") for what in found[f"{name(approved)}, point conclusion"]] == [True]
    assert no_hash(approved)


@pytest.mark.parametrize("column", ["opened_at", "judged_at", "answered_at", "settled_at"])
def test_a_changed_moment_of_a_reading_is_noticed(approved, column):
    tamper(f"UPDATE reviews_reviewread SET {column} = '2026-01-02 03:04:05' WHERE judgement = 'disagree'")
    assert set(damages()) == {name(approved)} and no_hash(approved)


def test_a_deleted_reading_is_named(approved, cast):
    tamper("DELETE FROM reviews_reviewread WHERE judgement = 'disagree'")
    what = f"What account {cast.reviewer.pk} read there is gone."
    assert damages()[f"{name(approved)}, point conclusion"] == {what}
    assert no_hash(approved)


def test_an_invented_reading_is_named(approved, cast):
    tamper("UPDATE reviews_reviewread SET reviewer_id = %s WHERE judgement = 'disagree'", cast.qa_manager.pk)
    assert damages()[f"{name(approved)}, point conclusion"] == {
        f"What account {cast.reviewer.pk} read there is gone.",
        f"No entry of the trail says that account {cast.qa_manager.pk} opened it.",
    }


@pytest.mark.parametrize(
    ("change", "part"), [("comment = 'Nothing seen.'", "comment."), ("at = '2026-01-02 03:04:05'", "decided_at.")]
)
def test_a_changed_approval_is_named(approved, change, part):
    tamper(f"UPDATE reviews_decision SET {change}")
    assert named(approved) == {part} and no_hash(approved)


def test_changed_reasons_of_a_rejection_are_named(cast, lab, quick_computing):
    rejected = builders.rejected_version(cast, lab)
    assert verify().ok, verify().damages
    tamper('UPDATE reviews_decision SET reasons = \'[{"point": "", "text": "other"}]\'')
    assert named(rejected) == {"reasons."} and no_hash(rejected)


def test_a_deleted_decision_is_named(cast, lab, quick_computing):
    rejected = builders.rejected_version(cast, lab)
    tamper("DELETE FROM reviews_decision")
    assert any("the decision is gone" in what for what in damages()[name(rejected)])


@pytest.mark.parametrize(("change", "part"), [("reason = 'none'", "reason."), ("at = '2026-01-02 03:04:05'", "at")])
def test_a_changed_withdrawal_is_named(approved, cast, change, part):
    reviewing.withdraw(
        version_id=approved.pk,
        by=cast.qa_manager,
        proof=builders.proof_of(cast.qa_manager),
        content_hash=approved.content_hash,
        reason="The standard was another one.",
    )
    assert verify().ok, verify().damages
    tamper(f"UPDATE reviews_withdrawal SET {change}")
    assert part in "".join(damages()[f"{name(approved)}, withdrawal"]) and no_hash(approved)


def test_a_reading_that_was_handed_back_and_done_anew_is_whole(cast, lab, quick_computing):
    version = builders.taken_version(cast, lab)
    point = version.points.first()
    reviewing.open_point(version_id=version.pk, point_id=point.pk, by=cast.reviewer)
    reviewing.hand_back(version_id=version.pk, by=cast.reviewer)
    reviewing.take(version_id=version.pk, by=cast.reviewer)
    builders.see_everything(version, cast.reviewer)
    assert verify().ok, verify().damages


def test_a_superseded_version_and_the_one_that_took_its_place_are_whole(approved, cast, quick_computing):
    draft = drafts.revise(version_id=approved.pk, by=cast.analyst, reason="more to say")
    builders.submit(draft, cast.analyst)
    reviewing.take(version_id=draft.pk, by=cast.reviewer)
    builders.see_everything(draft, cast.reviewer)
    fresh = InterpretationVersion.objects.get(pk=draft.pk)
    reviewing.approve(
        version_id=draft.pk,
        by=cast.reviewer,
        proof=builders.proof_of(cast.reviewer),
        content_hash=fresh.content_hash,
    )
    assert verify().ok, verify().damages
    assert Decision.objects.count() == 2 and ReviewRead.objects.filter(point__version=draft).exists()


def test_a_draft_whose_submission_was_wiped_out_is_named(cast, lab, quick_computing):
    version = builders.submitted_version(cast, lab)
    tamper(
        "UPDATE reviews_interpretationversion SET state = 'draft', content = NULL, content_hash = '',"
        " submission_id = NULL, submitted_by_id = NULL, submitted_at = NULL"
    )
    assert damages()[name(version)] == {"It should be waiting for a second reading: so the trail says."}
