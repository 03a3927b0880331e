"""What the pages say of decisions and claims: each act with its own person, and no computed word over a changed one."""

from __future__ import annotations

import pytest
from django.urls import reverse

from labsite.errors import NotPossible
from reviews import presenting, selectors
from reviews.presenting.records import numbers_in_words
from reviews.services import drafts, reviewing
from spectra.models import Sample, SampleKind
from spectra.services import analyses
from tests import builders


@pytest.fixture
def withdrawn(cast, lab, quick_computing):
    version = builders.approved_version(cast, lab)
    reviewing.withdraw(
        version_id=version.pk,
        by=cast.qa_manager,
        proof=builders.proof_of(cast.qa_manager),
        content_hash=version.content_hash,
        reason="the lot was mixed up",
    )
    return selectors.version(version.pk)


def test_a_withdrawal_stands_beside_the_approval_with_its_own_person_and_signature(withdrawn, cast):
    approval, withdrawal = presenting.decision_notes(withdrawn)
    assert (approval["state"], approval["by"]) == ("approved", cast.reviewer.printed_name)
    assert (withdrawal["state"], withdrawal["by"]) == ("withdrawn", cast.qa_manager.printed_name)
    assert withdrawal["reasons"] == ["the lot was mixed up"]
    assert withdrawal["signature_digest"] != approval["signature_digest"]


def test_the_life_of_a_withdrawn_sample_ends_with_the_withdrawal(withdrawn):
    line = presenting.life_line(selectors.examination(withdrawn.interpretation.examination_id), withdrawn)
    assert [step["label"] for step in line][-2:] == ["approved", "withdrawn"]


def test_a_withdrawn_version_reaches_the_analysts_today(withdrawn, as_person, cast):
    page = as_person(cast.analyst).get(reverse("reviews:today")).content.decode()
    assert "Withdrawn by" in page and "the lot was mixed up" in page


def test_a_refused_conclusion_keeps_the_plot_and_what_was_typed(cast, lab, quick_computing, as_person):
    version = builders.drafted_version(cast, lab)
    answer = as_person(cast.analyst).post(
        reverse("reviews:write_conclusion", args=[version.pk]), {"value": "does_not_comply", "text": ""}
    )
    assert answer.status_code == 422 and "Say what the conclusion rests on." in answer.content.decode()
    assert "style-src 'self' 'unsafe-inline'" in answer["Content-Security-Policy"]


def test_a_changed_claim_does_not_show_the_computed_sentence_as_its_own(cast, lab, quick_computing):
    screened = {"name": "water", "verdict": "not_found_above_limit", "agrees": "yes", "detection_limit_fraction": 0.004}
    result = builders.RESULT | {"impurities": {"screened": [screened], "unexplained": []}}
    quick_computing.outcome = builders.fake_outcome(result)
    version = builders.drafted_version(cast, lab)
    claim = version.claims.get(kind="impurity", computed_verdict="not_found_above_limit")
    before = presenting.claim_item(claim, lanes_by_group={})
    changed = drafts.change_claim(
        version_id=version.pk,
        claim_id=claim.pk,
        by=cast.analyst,
        verdict="cannot_be_seen",
        reason="hidden under the acid's O-H",
        edits=None,
    )
    assert before["limit"] and not presenting.claim_item(changed, lanes_by_group={})["limit"]


def test_a_confirmation_is_not_taken_over_by_a_colleague(cast, lab, quick_computing):
    version = builders.drafted_version(cast, lab)
    claim = version.claims.first()
    drafts.confirm_claim(version_id=version.pk, claim_id=claim.pk, by=cast.analyst)
    with pytest.raises(NotPossible) as refused:
        drafts.confirm_claim(version_id=version.pk, claim_id=claim.pk, by=cast.second_analyst)
    assert refused.value.code == "claim.confirmed_already" and cast.analyst.printed_name in refused.value.message


def test_the_same_file_for_two_samples_is_a_point_for_the_reviewer(cast, lab, quick_computing):
    first, second = builders.examination(cast, lab), builders.examination(cast, lab, lot="another lot")
    data = builders.jcamp_file(seed=4)
    for row in (first, second):
        builders.upload(row, cast.analyst, data=data)
    for analysis in second.spectra.get().analyses.all():
        analyses.execute(analysis_id=analysis.pk)
    points = {point.key: point for point in selectors.draft_points(builders.version_of(second))}
    assert Sample.objects.get(examinations=first).code in points["same_file"].detail


@pytest.mark.parametrize(
    ("numbers", "words"), [([1], "1"), ([1, 2, 3], "1-3"), ([5, 1, 2], "1-2, 5"), ([], ""), ([2, 4, 6], "2, 4, 6")]
)
def test_container_numbers_are_told_as_runs(numbers, words):
    assert numbers_in_words(numbers) == words


def test_an_examination_is_found_in_the_trail_by_its_samples_number(cast, lab, quick_computing, as_person):
    version = builders.drafted_version(cast, lab)
    sample = version.interpretation.examination.samples.get()
    assert sample.kind == SampleKind.INDIVIDUAL
    page = as_person(cast.qa_manager).get(reverse("trail:search"), {"text": sample.code}).content.decode()
    assert version.interpretation.examination.code in page
