"""One decision ends a version: approved, or rejected with reasons; later revised, superseded or withdrawn."""

from __future__ import annotations

import pytest
from django.db import IntegrityError, connection, transaction

from labsite.errors import BadInput, NotAllowed, NotPossible, Stale
from labsite.signing.models import Signature
from reviews.models import Decision, InterpretationVersion, Withdrawal
from reviews.services import drafts, reviewing
from spectra.services import uploads
from tests import builders
from tests.cast import make_person


@pytest.fixture
def taken(cast, lab, quick_computing):
    return builders.taken_version(cast, lab)


def approve(version, by, **values):
    fields = {"content_hash": version.content_hash, "proof": builders.proof_of(by), "comment": "agreed"} | values
    return reviewing.approve(version_id=version.pk, by=by, **fields)


def reject(version, by, reasons=({"point": "", "text": "The second film is missing."},), **values):
    fields = {"content_hash": version.content_hash, "proof": builders.proof_of(by)} | values
    return reviewing.reject(version_id=version.pk, by=by, reasons=list(reasons), **fields)


def fresh(version) -> InterpretationVersion:
    return InterpretationVersion.objects.get(pk=version.pk)


def test_an_approval_is_signed_over_what_was_submitted(taken, cast):
    builders.see_everything(taken, cast.reviewer)
    decision = approve(taken, cast.reviewer)
    assert (decision.verdict, decision.by, decision.comment) == ("approved", cast.reviewer, "agreed")
    assert decision.signature.content_hash == taken.content_hash and decision.signature.meaning == "reviewed"
    assert fresh(taken).state == "approved"


def test_nothing_is_approved_before_everything_was_seen(taken, cast):
    with pytest.raises(NotPossible) as refused:
        approve(taken, cast.reviewer)
    assert refused.value.code == "interpretation.not_reviewed" and "2 points are not opened." in refused.value.message
    assert fresh(taken).state == "in_review" and not Decision.objects.exists()


def test_nothing_is_approved_while_a_disagreement_is_open(taken, cast):
    builders.see_everything(taken, cast.reviewer)
    point = taken.points.get(key="conclusion")
    reviewing.judge_point(
        version_id=taken.pk, point_id=point.pk, by=cast.reviewer, judgement="disagree", comment="not so"
    )
    with pytest.raises(NotPossible):
        approve(taken, cast.reviewer)
    reviewing.answer_disagreement(version_id=taken.pk, point_id=point.pk, by=cast.analyst, answer="because")
    reviewing.settle_disagreement(version_id=taken.pk, point_id=point.pk, by=cast.reviewer, settlement="I see")
    assert approve(taken, cast.reviewer).verdict == "approved"


def test_a_decision_on_another_hash_is_refused(taken, cast):
    builders.see_everything(taken, cast.reviewer)
    for act in (approve, reject):
        with pytest.raises(Stale):
            act(taken, cast.reviewer, content_hash="0" * 64)
    assert not Decision.objects.exists()


def test_nothing_is_decided_on_content_that_was_altered(taken, cast):
    from tests.lifting import tamper

    builders.see_everything(taken, cast.reviewer)
    tamper(
        "UPDATE reviews_interpretationversion SET content = %s WHERE id = %s",
        bytes(fresh(taken).content).replace(b"complies", b"comp1ies"),
        taken.pk,
    )
    with pytest.raises(NotPossible) as refused:
        approve(taken, cast.reviewer)
    assert refused.value.code == "interpretation.altered"


def test_only_the_reviewer_who_took_it_decides(taken, cast):
    other = make_person("other_reviewer", roles=("reviewer",))
    for person in (other, cast.analyst, cast.second_analyst, cast.qa_manager, cast.method_owner, cast.outsider):
        for act in (approve, reject):
            with pytest.raises(NotAllowed) as refused:
                act(taken, person)
            assert refused.value.status == 403
    assert not Decision.objects.exists()


def test_a_decision_is_final(taken, cast):
    builders.see_everything(taken, cast.reviewer)
    approve(taken, cast.reviewer)
    for act in (approve, reject):
        with pytest.raises(NotPossible) as refused:
            act(taken, cast.reviewer)
        assert refused.value.status == 409
    with pytest.raises(NotPossible):
        reviewing.hand_back(version_id=taken.pk, by=cast.reviewer)
    assert Decision.objects.count() == 1 and Signature.objects.filter(meaning="reviewed").count() == 1


@pytest.mark.parametrize(
    ("reasons", "code"),
    [
        ((), "rejection.no_reason"),
        (({"point": "", "text": "  "},), "rejection.no_reason"),
        (({"text": ""}, {}), "rejection.no_reason"),
        (({"point": "no such point", "text": "x"},), "rejection.unknown_point"),
    ],
)
def test_a_rejection_needs_a_reason(taken, cast, reasons, code):
    with pytest.raises(BadInput) as refused:
        reject(taken, cast.reviewer, reasons)
    assert refused.value.code == code
    assert fresh(taken).state == "in_review"


def test_a_rejection_needs_nothing_but_its_reasons(taken, cast):
    decision = reject(taken, cast.reviewer, ({"point": "conclusion", "text": " too bold "}, {"text": "and noisy"}))
    assert decision.reasons == [{"point": "conclusion", "text": "too bold"}, {"point": "", "text": "and noisy"}]
    assert fresh(taken).state == "rejected"


def revise(version, by, reason="measured again"):
    return drafts.revise(version_id=version.pk, by=by, reason=reason)


def test_a_revision_carries_the_claims_and_no_approval(taken, cast):
    reject(taken, cast.reviewer)
    second = revise(taken, cast.analyst)
    assert (second.number, second.state, second.revises, second.conclusion) == (2, "draft", taken, "complies")
    assert second.content is None and second.submission is None and second.taken_by is None
    assert not second.points.exists()
    carried = ["key", "verdict", "status", "reason", "stated_by", "evidence", "computed_verdict"]
    assert list(second.claims.values(*carried)) == list(taken.claims.values(*carried))
    first = fresh(taken)
    assert first.state == "rejected" and first.content is not None


def test_a_revised_version_is_reviewed_again_from_the_start(taken, cast):
    reject(taken, cast.reviewer)
    second = builders.submit(revise(taken, cast.analyst), cast.analyst)
    reviewing.take(version_id=second.pk, by=cast.reviewer)
    point = second.points.get(key="earlier")
    assert "The second film is missing." in point.detail and "No claim was changed since." in point.detail
    with pytest.raises(NotPossible):
        approve(second, cast.reviewer)
    builders.see_everything(second, cast.reviewer)
    assert approve(second, cast.reviewer).verdict == "approved"


def test_evidence_can_change_again_in_a_revision(taken, cast):
    reject(taken, cast.reviewer)
    revise(taken, cast.analyst)
    row = taken.interpretation.examination
    spectrum = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=3)).spectra.get()
    assert uploads.change_role(spectrum_id=spectrum.pk, by=cast.analyst, role="repeat", reason="asked for")


def test_a_version_is_revised_once_with_a_reason_by_an_analyst(taken, cast):
    reject(taken, cast.reviewer)
    with pytest.raises(BadInput):
        revise(taken, cast.analyst, " ")
    with pytest.raises(NotAllowed):
        revise(taken, cast.reviewer)
    revise(taken, cast.analyst)
    with pytest.raises(NotPossible) as refused:
        revise(taken, cast.second_analyst)
    assert refused.value.code == "interpretation.revised_already"


def test_an_open_version_is_not_revised(taken, cast):
    with pytest.raises(NotPossible):
        revise(taken, cast.analyst)


def test_a_later_approval_supersedes_the_earlier_one(cast, lab, quick_computing):
    first = builders.approved_version(cast, lab)
    second = builders.submit(revise(first, cast.analyst), cast.analyst)
    assert fresh(first).state == "approved"
    reviewing.take(version_id=second.pk, by=cast.reviewer)
    builders.see_everything(second, cast.reviewer)
    approve(second, cast.reviewer)
    assert (fresh(first).state, fresh(second).state) == ("superseded", "approved")
    with pytest.raises(NotPossible):
        withdraw(first, cast.qa_manager)


def test_a_rejected_revision_leaves_the_earlier_approval_in_effect(cast, lab, quick_computing):
    first = builders.approved_version(cast, lab)
    second = builders.submit(revise(first, cast.analyst), cast.analyst)
    reviewing.take(version_id=second.pk, by=cast.reviewer)
    reject(second, cast.reviewer)
    assert (fresh(first).state, fresh(second).state) == ("approved", "rejected")


def withdraw(version, by, reason="the standard was mislabelled", **values):
    fields = {"content_hash": version.content_hash, "proof": builders.proof_of(by)} | values
    return reviewing.withdraw(version_id=version.pk, by=by, reason=reason, **fields)


def test_qa_withdraws_with_a_reason_and_a_signature(cast, lab, quick_computing):
    version = builders.approved_version(cast, lab)
    with pytest.raises(BadInput):
        withdraw(version, cast.qa_manager, " ")
    with pytest.raises(Stale):
        withdraw(version, cast.qa_manager, content_hash="0" * 64)
    for person in (cast.analyst, cast.reviewer, cast.method_owner, cast.administrator):
        with pytest.raises(NotAllowed):
            withdraw(version, person)
    withdrawal = withdraw(version, cast.qa_manager)
    assert withdrawal.signature.meaning == "withdrawn" and fresh(version).state == "withdrawn"
    assert Decision.objects.get().verdict == "approved"
    with pytest.raises(NotPossible):
        withdraw(version, cast.qa_manager)
    assert revise(version, cast.analyst).number == 2


def test_a_version_that_was_never_approved_is_not_withdrawn(taken, cast):
    with pytest.raises(NotPossible):
        withdraw(taken, cast.qa_manager)
    assert not Withdrawal.objects.exists()


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE reviews_decision SET verdict = 'rejected'",
        "DELETE FROM reviews_decision",
        "UPDATE reviews_interpretationversion SET state = 'in_review'",
        "UPDATE reviews_interpretationversion SET state = 'rejected'",
        "UPDATE reviews_interpretationversion SET state = 'draft'",
    ],
)
def test_the_database_never_undoes_a_decision(cast, lab, quick_computing, statement):
    builders.approved_version(cast, lab)
    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)
