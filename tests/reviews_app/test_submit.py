"""The conclusion, and the submission that cuts and signs the version."""

from __future__ import annotations

import json

import pytest
from django.db import IntegrityError, connection, transaction

from labsite.errors import BadInput, NotAllowed, NotPossible, Stale
from labsite.signing.models import Signature
from reviews import content
from reviews.models import InterpretationVersion
from reviews.services import drafts
from spectra.models import Analysis
from spectra.services import analyses, uploads
from tests import builders


@pytest.fixture
def version(cast, lab, quick_computing):
    return builders.drafted_version(cast, lab)


@pytest.fixture
def ready(version, cast):
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    return version


@pytest.fixture
def submitted(ready, cast):
    return builders.submit(ready, cast.analyst)


def with_identity(version, verdict, by):
    claim = version.claims.get(key="identity")
    return drafts.change_claim(
        version_id=version.pk, claim_id=claim.pk, by=by, verdict=verdict, reason="bands are missing", edits=None
    )


@pytest.mark.parametrize(
    ("identity", "conclusion", "text", "code"),
    [
        ("consistent", "complies", "", None),
        ("consistent_with_differences", "complies", "", None),
        ("not_consistent", "complies", "text", "conclusion.identity_not_consistent"),
        ("not_distinguishable", "complies", "text", "conclusion.identity_not_consistent"),
        ("cannot_be_compared", "complies", "text", "conclusion.identity_not_consistent"),
        ("not_consistent", "does_not_comply", "", "conclusion.no_text"),
        ("not_consistent", "does_not_comply", "The C=O is missing.", None),
        ("consistent", "inconclusive", " ", "conclusion.no_text"),
        ("consistent", "inconclusive", "Too noisy.", None),
        ("consistent", "released", "text", "conclusion.choice"),
        ("consistent", "", "text", "conclusion.choice"),
    ],
)
def test_a_conclusion_follows_from_the_identity_claim(version, cast, identity, conclusion, text, code):
    if identity != "consistent":
        with_identity(version, identity, cast.analyst)
    if code is None:
        builders.conclude(version, cast.analyst, conclusion=conclusion, text=text)
        version.refresh_from_db()
        assert (version.conclusion, version.conclusion_text) == (conclusion, text.strip())
        return
    with pytest.raises(BadInput) as refused:
        builders.conclude(version, cast.analyst, conclusion=conclusion, text=text)
    assert refused.value.code == code


def test_nothing_is_signed_while_a_claim_is_open(version, cast):
    builders.conclude(version, cast.analyst)
    with pytest.raises(NotPossible) as refused:
        builders.hash_to_sign(version)
    assert refused.value.code == "interpretation.claims_open" and "5 claims are" in refused.value.message
    with pytest.raises(NotPossible):
        drafts.submit(
            version_id=version.pk, by=cast.analyst, proof=builders.proof_of(cast.analyst), content_hash="0" * 64
        )
    assert not Signature.objects.filter(kind="interpretation").exists()


def test_nothing_is_signed_without_a_conclusion(version, cast):
    builders.confirm_all(version, cast.analyst)
    with pytest.raises(NotPossible) as refused:
        builders.hash_to_sign(version)
    assert refused.value.code == "interpretation.no_conclusion"


def test_nothing_is_signed_while_a_file_waits_for_an_answer(ready, cast):
    builders.upload(ready.interpretation.examination, cast.analyst, data=builders.table_file(), file_name="open.txt")
    with pytest.raises(NotPossible) as refused:
        builders.hash_to_sign(ready)
    assert refused.value.code == "interpretation.upload_waits" and "open.txt" in refused.value.message


def test_nothing_is_signed_on_an_analysis_that_was_replaced(ready, cast):
    row = ready.interpretation.examination
    second = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    uploads.change_role(spectrum_id=second.pk, by=cast.analyst, role="decisive", reason="better film")
    with pytest.raises(NotPossible) as refused:
        builders.hash_to_sign(ready)
    assert refused.value.code == "interpretation.analysis_waits"
    uploads.change_role(spectrum_id=second.pk, by=cast.analyst, role="excluded", reason="torn")
    with pytest.raises(NotPossible) as refused:
        builders.hash_to_sign(ready)
    assert refused.value.code == "interpretation.no_decisive_spectrum"


def test_a_claim_changed_after_the_conclusion_takes_the_conclusion_with_it(ready, cast):
    with_identity(ready, "not_consistent", cast.analyst)
    with pytest.raises(BadInput) as refused:
        builders.submit(ready, cast.analyst)
    assert refused.value.code == "conclusion.identity_not_consistent"
    assert InterpretationVersion.objects.get().state == "draft"


def test_a_submission_freezes_and_signs_what_was_shown(ready, cast):
    shown = builders.hash_to_sign(ready)
    version = builders.submit(ready, cast.analyst)
    version.refresh_from_db()
    assert (version.state, version.submitted_by, version.content_hash) == ("submitted", cast.analyst, shown)
    assert content.hash_of(bytes(version.content)) == shown == version.submission.content_hash
    assert version.submission.meaning == "performed"
    document = json.loads(bytes(version.content))
    assert document["conclusion"] == "complies" and len(document["claims"]) == 5
    assert document["analysis"]["result_digest"] == version.analysis.result_digest
    assert [point["key"] for point in document["points"]] == list(version.points.values_list("key", flat=True))
    assert document["contributors"] == [cast.analyst.pk]


def test_a_hash_that_is_out_of_date_is_refused(ready, cast):
    shown = builders.hash_to_sign(ready)
    builders.conclude(ready, cast.analyst, text="One word more.")
    with pytest.raises(Stale):
        drafts.submit(version_id=ready.pk, by=cast.analyst, proof=builders.proof_of(cast.analyst), content_hash=shown)
    assert not Signature.objects.filter(kind="interpretation").exists()


def test_an_analyst_who_only_signs_can_submit_and_counts_as_a_contributor(ready, cast):
    version = builders.submit(ready, cast.second_analyst)
    assert version.submitted_by == cast.second_analyst
    kinds = version.interpretation.examination.contributions.filter(user=cast.second_analyst)
    assert list(kinds.values_list("kind", flat=True)) == ["concluded"]


def test_a_proof_is_good_for_one_signature(ready, cast, lab):
    other = builders.drafted_version(cast, lab, lot="L-2")
    builders.confirm_all(other, cast.analyst)
    builders.conclude(other, cast.analyst)
    proof = builders.proof_of(cast.analyst)
    drafts.submit(version_id=ready.pk, by=cast.analyst, proof=proof, content_hash=builders.hash_to_sign(ready))
    with pytest.raises(NotPossible):
        drafts.submit(version_id=other.pk, by=cast.analyst, proof=proof, content_hash=builders.hash_to_sign(other))
    other.refresh_from_db()
    assert other.state == "draft"


def test_nobody_signs_with_the_proof_of_another(ready, cast):
    with pytest.raises(NotAllowed):
        drafts.submit(
            version_id=ready.pk,
            by=cast.analyst,
            proof=builders.proof_of(cast.second_analyst),
            content_hash=builders.hash_to_sign(ready),
        )


def test_only_an_analyst_submits_and_only_a_draft(submitted, cast, lab):
    draft = builders.drafted_version(cast, lab, lot="L-2")
    for person in (cast.reviewer, cast.qa_manager, cast.outsider):
        with pytest.raises(NotAllowed):
            drafts.submit(version_id=draft.pk, by=person, proof=builders.proof_of(person), content_hash="0" * 64)
    with pytest.raises(NotPossible):
        drafts.submit(
            version_id=submitted.pk,
            by=cast.analyst,
            proof=builders.proof_of(cast.analyst),
            content_hash=submitted.content_hash,
        )


def test_a_submitted_version_is_edited_by_no_service(submitted, cast):
    claim = submitted.claims.first()
    for act in (
        lambda: drafts.confirm_claim(version_id=submitted.pk, claim_id=claim.pk, by=cast.analyst),
        lambda: builders.conclude(submitted, cast.analyst),
        lambda: drafts.add_claim(
            version_id=submitted.pk, by=cast.analyst, kind="impurity", title="t", verdict="found", reason="r"
        ),
    ):
        with pytest.raises(NotPossible) as refused:
            act()
        assert refused.value.code == "interpretation.not_edit" and refused.value.status == 409


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE reviews_interpretationversion SET conclusion = 'inconclusive'",
        "UPDATE reviews_interpretationversion SET conclusion_text = 'other'",
        "UPDATE reviews_interpretationversion SET content_hash = 'x'",
        "UPDATE reviews_interpretationversion SET submitted_by_id = NULL",
        "UPDATE reviews_interpretationversion SET state = 'draft'",
        "UPDATE reviews_interpretationversion SET state = 'approved'",
        "UPDATE reviews_interpretationversion SET number = 9",
        "DELETE FROM reviews_interpretationversion",
        "UPDATE reviews_claim SET verdict = 'undecided'",
        "UPDATE reviews_claim SET reason = reason",
        "DELETE FROM reviews_claim",
        "UPDATE reviews_mustseepoint SET detail = 'nothing'",
        "DELETE FROM reviews_mustseepoint",
    ],
)
def test_the_database_refuses_to_change_what_was_submitted(submitted, statement):
    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)


def test_the_database_refuses_a_claim_that_comes_late(submitted):
    claim = submitted.claims.first()
    claim.pk, claim.key = None, "late"
    claim._state.adding = True
    with pytest.raises(IntegrityError), transaction.atomic():
        claim.save()


def test_an_analysis_that_ends_after_the_submission_changes_nothing(submitted, cast, rung):
    old = submitted.analysis
    late = Analysis.objects.create(
        spectrum=old.spectrum,
        method=old.method,
        group_table=old.group_table,
        material_version=old.material_version,
        queued_by=cast.analyst,
        queued_at=old.queued_at,
    )
    before = list(submitted.claims.order_by("pk").values())
    assert analyses.execute(analysis_id=late.pk)
    submitted.refresh_from_db()
    assert submitted.analysis == old and list(submitted.claims.order_by("pk").values()) == before


def test_points_name_what_surrounds_a_proposal(cast, lab, quick_computing):
    row = builders.examination(cast, lab)
    builders.analysed_spectrum(cast, row, resolution_cm1=8.0)
    replicate = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=4), file_name="torn.dx").spectra.get()
    uploads.change_role(spectrum_id=replicate.pk, by=cast.analyst, role="excluded", reason="torn film")
    builders.upload(row, cast.second_analyst, data=builders.jcamp_file(seed=5), role="repeat")
    version = builders.version_of(row)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    points = {point.key: point for point in builders.submit(version, cast.analyst).points.all()}
    assert list(points) == ["undecided", "departures", "excluded:1", "rerun:1", "conclusion"]
    assert "8 cm⁻¹" in points["departures"].detail
    assert "torn.dx" in points["excluded:1"].detail and "torn film" in points["excluded:1"].detail
