"""A reviewer takes a proposal, opens and judges its points, hands it back or runs out of time."""

from __future__ import annotations

from datetime import timedelta

import pytest
from django.db import IntegrityError, connection, transaction
from django.utils import timezone

from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible
from labsite.trail.models import TrailEntry
from reviews import selectors
from reviews.models import InterpretationVersion, ReviewRead
from reviews.services import reviewing
from spectra import hooks
from spectra.models import Contribution
from tests import builders
from tests.cast import make_person


@pytest.fixture
def submitted(cast, lab, quick_computing):
    return builders.submitted_version(cast, lab)


@pytest.fixture
def taken(submitted, cast):
    return reviewing.take(version_id=submitted.pk, by=cast.reviewer)


@pytest.fixture
def point(taken):
    return taken.points.get(key="conclusion")


@pytest.fixture
def other_reviewer(cast):
    return make_person("other_reviewer", roles=("reviewer",))


def state_of(version) -> str:
    return InterpretationVersion.objects.get(pk=version.pk).state


def open_point(version, point, by):
    return reviewing.open_point(version_id=version.pk, point_id=point.pk, by=by)


def judge(version, point, by, judgement="agree", comment=""):
    return reviewing.judge_point(version_id=version.pk, point_id=point.pk, by=by, judgement=judgement, comment=comment)


def disagree(version, point, by):
    open_point(version, point, by)
    return judge(version, point, by, "disagree", "the overlay shows otherwise")


def answer(version, point, by, text="it is the window"):
    return reviewing.answer_disagreement(version_id=version.pk, point_id=point.pk, by=by, answer=text)


def settle(version, point, by, text="agreed, it is the window"):
    return reviewing.settle_disagreement(version_id=version.pk, point_id=point.pk, by=by, settlement=text)


def test_a_taken_proposal_names_its_reviewer(submitted, cast, other_reviewer):
    version = reviewing.take(version_id=submitted.pk, by=cast.reviewer)
    assert (version.state, version.taken_by) == ("in_review", cast.reviewer)
    with pytest.raises(NotPossible) as refused:
        reviewing.take(version_id=submitted.pk, by=other_reviewer)
    assert refused.value.code == "interpretation.not_take" and refused.value.status == 409


def test_a_proposal_handed_back_can_be_taken_by_another(taken, cast, other_reviewer):
    with pytest.raises(NotAllowed):
        reviewing.hand_back(version_id=taken.pk, by=other_reviewer)
    version = reviewing.hand_back(version_id=taken.pk, by=cast.reviewer)
    assert (version.state, version.taken_by) == ("submitted", None)
    assert reviewing.take(version_id=taken.pk, by=other_reviewer).taken_by == other_reviewer


def test_a_proposal_that_is_held_too_long_goes_back_by_itself(taken, settings):
    assert reviewing.return_overdue() == 0
    early = timezone.now() - timedelta(hours=settings.REVIEW_HOURS, minutes=1)
    InterpretationVersion.objects.filter(pk=taken.pk).update(taken_at=early)
    hooks.swept()
    version = InterpretationVersion.objects.get(pk=taken.pk)
    assert (version.state, version.taken_by, version.taken_at) == ("submitted", None, None)
    assert TrailEntry.objects.filter(event="interpretation.timed_out", actor_id=None).count() == 1


def test_what_is_opened_is_noted_once(taken, point, cast):
    first = open_point(taken, point, cast.reviewer)
    assert open_point(taken, point, cast.reviewer).pk == first.pk
    assert TrailEntry.objects.filter(event="interpretation.point_opened").count() == 1


def test_a_point_is_opened_before_it_is_judged(taken, point, cast):
    with pytest.raises(NotPossible) as refused:
        judge(taken, point, cast.reviewer)
    assert refused.value.code == "point.not_opened"
    open_point(taken, point, cast.reviewer)
    assert judge(taken, point, cast.reviewer).judgement == "agree"


@pytest.mark.parametrize(
    ("judgement", "comment", "code"),
    [("disagree", "  ", "point.no_comment"), ("maybe", "x", "point.judgement"), ("", "x", "point.judgement")],
)
def test_a_judgement_without_sense_is_refused(taken, point, cast, judgement, comment, code):
    open_point(taken, point, cast.reviewer)
    with pytest.raises(BadInput) as refused:
        judge(taken, point, cast.reviewer, judgement, comment)
    assert refused.value.code == code
    assert ReviewRead.objects.get().judgement == ""


def test_an_override_is_judged_with_a_comment(cast, lab, quick_computing):
    from reviews.services import drafts

    version = builders.drafted_version(cast, lab)
    claim = version.claims.get(key="group:alcohol")
    drafts.change_claim(
        version_id=version.pk, claim_id=claim.pk, by=cast.analyst, verdict="undecided", reason="wet", edits=None
    )
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    version = builders.submit(version, cast.analyst)
    reviewing.take(version_id=version.pk, by=cast.reviewer)
    point = version.points.get(key="override:group:alcohol")
    open_point(version, point, cast.reviewer)
    with pytest.raises(BadInput) as refused:
        judge(version, point, cast.reviewer)
    assert refused.value.code == "point.no_comment"
    assert judge(version, point, cast.reviewer, comment="seen on the overlay").judgement == "agree"


def test_only_the_reviewer_who_took_it_opens_and_judges(taken, point, cast, other_reviewer):
    for person in (other_reviewer, cast.analyst, cast.second_analyst, cast.qa_manager, cast.outsider):
        with pytest.raises(NotAllowed):
            open_point(taken, point, person)
        with pytest.raises(NotAllowed):
            judge(taken, point, person)


def test_a_point_is_reached_only_through_its_own_version(taken, cast, lab):
    other = builders.taken_version(cast, lab, lot="L-2")
    with pytest.raises(NotVisible):
        open_point(taken, other.points.first(), cast.reviewer)


def test_a_disagreement_is_answered_and_settled_in_writing(taken, point, cast):
    disagree(taken, point, cast.reviewer)
    assert selectors.approval_blockers(taken, cast.reviewer)[-1] == "1 disagreement is not settled."
    with pytest.raises(NotPossible) as refused:
        settle(taken, point, cast.reviewer)
    assert refused.value.code == "point.not_answered"
    with pytest.raises(BadInput):
        answer(taken, point, cast.analyst, " ")
    assert [read.point for read in selectors.disagreements_to_answer()] == [point]
    answer(taken, point, cast.analyst)
    assert selectors.disagreements_to_answer() == []
    with pytest.raises(BadInput):
        settle(taken, point, cast.reviewer, " ")
    read = settle(taken, point, cast.reviewer)
    assert read.settled_at and read.answered_by == cast.analyst
    states = {state.point.key: state.word for state in selectors.point_states(taken, cast.reviewer)}
    assert states["conclusion"] == "disagreed, settled"
    for act in (lambda: settle(taken, point, cast.reviewer), lambda: answer(taken, point, cast.analyst)):
        with pytest.raises(NotPossible) as refused:
            act()
        assert refused.value.code == "point.settled"


def test_a_disagreement_stands_until_it_is_settled(taken, point, cast):
    disagree(taken, point, cast.reviewer)
    with pytest.raises(NotPossible) as refused:
        judge(taken, point, cast.reviewer, "disagree", "still")
    assert refused.value.code == "point.disagreed_already"


def test_a_settled_disagreement_taken_up_again_has_to_be_settled_again(taken, point, cast):
    disagree(taken, point, cast.reviewer)
    answer(taken, point, cast.analyst)
    settle(taken, point, cast.reviewer)
    read = judge(taken, point, cast.reviewer, "disagree", "on second thought")
    assert (read.answer, read.settlement, read.settled_at) == ("", "", None)
    assert "1 disagreement is not settled." in selectors.approval_blockers(taken, cast.reviewer)


def test_the_analyst_answers_and_thereby_has_a_hand_in_it(taken, point, cast):
    disagree(taken, point, cast.reviewer)
    for person in (cast.reviewer, cast.qa_manager, cast.outsider):
        with pytest.raises(NotAllowed):
            answer(taken, point, person)
    answering = make_person("answering", roles=("analyst", "reviewer"))
    answer(taken, point, answering)
    assert Contribution.objects.filter(user=answering, kind="answered").exists()
    reviewing.hand_back(version_id=taken.pk, by=cast.reviewer)
    with pytest.raises(NotAllowed) as refused:
        reviewing.take(version_id=taken.pk, by=answering)
    assert refused.value.code == "interpretation.own_work"


def test_there_is_nothing_to_answer_where_nobody_disagrees(taken, point, cast):
    open_point(taken, point, cast.reviewer)
    with pytest.raises(NotPossible) as refused:
        answer(taken, point, cast.analyst)
    assert refused.value.code == "point.no_disagreement"


def test_a_second_reviewer_begins_anew(taken, cast, other_reviewer):
    builders.see_everything(taken, cast.reviewer)
    reviewing.hand_back(version_id=taken.pk, by=cast.reviewer)
    version = reviewing.take(version_id=taken.pk, by=other_reviewer)
    assert selectors.approval_blockers(version, other_reviewer) == ["2 points are not opened."]
    assert selectors.approval_blockers(version, cast.reviewer) == []


def test_blockers_count_what_is_left(taken, point, cast):
    assert selectors.approval_blockers(taken, cast.reviewer) == ["2 points are not opened."]
    open_point(taken, point, cast.reviewer)
    assert selectors.approval_blockers(taken, cast.reviewer) == [
        "1 point is not opened.",
        "1 opened point is not judged.",
    ]
    builders.see_everything(taken, cast.reviewer)
    assert selectors.approval_blockers(taken, cast.reviewer) == []


def test_own_work_is_left_out_of_a_reviewers_list(submitted, cast, lab):
    both = make_person("both", roles=("analyst", "reviewer"))
    row = builders.examination(cast, lab, lot="L-2")
    builders.analysed_spectrum(cast, row, by=both)
    version = builders.version_of(row)
    builders.confirm_all(version, both)
    builders.conclude(version, both)
    builders.submit(version, both)
    assert {row.pk for row in selectors.proposals_for(cast.reviewer)} == {submitted.pk, version.pk}
    assert {row.pk for row in selectors.proposals_for(both)} == {submitted.pk}


def test_a_decided_review_is_never_edited(cast, lab, quick_computing):
    version = builders.approved_version(cast, lab)
    read = ReviewRead.objects.filter(point__version=version).first()
    for statement in (
        "UPDATE reviews_reviewread SET comment = 'other' WHERE id = %s",
        "DELETE FROM reviews_reviewread WHERE id = %s",
    ):
        with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
            cursor.execute(statement, [read.pk])
    with pytest.raises(IntegrityError), transaction.atomic():
        ReviewRead.objects.create(point=read.point, reviewer=cast.qa_manager, opened_at=timezone.now())
