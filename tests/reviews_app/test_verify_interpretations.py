"""What was changed in a proposal behind the application's back is named by verification."""

from __future__ import annotations

import pytest

from labsite.trail.verify import verify
from reviews.models import Claim, Decision, InterpretationVersion
from tests import builders
from tests.lifting import damages, tamper


@pytest.fixture
def approved(cast, lab, quick_computing):
    version = builders.approved_version(cast, lab)
    assert verify().ok, verify().damages
    return version


def name(version) -> str:
    return f"interpretation {version}"


@pytest.mark.parametrize(
    ("change", "part"),
    [
        ("verdict = 'undecided'", "verdict"),
        ("agrees = 'no'", "agrees"),
        ("status = 'proposed'", "status"),
        ("reason = 'because'", "reason"),
        ("title = 'Other'", "title"),
        ("computed_verdict = 'undecided'", "computed.verdict"),
        ("computed_text = 'nothing'", "computed.text"),
        ("must_see = %s", "must_see"),
        ("stated_by_id = NULL", "stated_by"),
    ],
)
def test_a_changed_claim_row_is_named(approved, change, part):
    values = (True,) if "%s" in change else ()
    tamper(f"UPDATE reviews_claim SET {change} WHERE key = 'group:ester'", *values)
    what = f"The claim shown differs from the signed one: {part}."
    assert damages() == {f"{name(approved)}, claim group:ester": {what}}


def test_a_removed_claim_and_an_invented_one_are_named(approved):
    tamper("UPDATE reviews_claim SET key = 'group:other' WHERE key = 'group:ester'")
    assert damages() == {
        f"{name(approved)}, claim group:ester": {"The signed claim is gone."},
        f"{name(approved)}, claim group:other": {"The claim shown was never signed."},
    }


def test_a_changed_point_is_named(approved):
    tamper("UPDATE reviews_mustseepoint SET detail = 'nothing' WHERE key = 'conclusion'")
    assert list(damages()) == [f"{name(approved)}, point conclusion"]


def test_a_changed_conclusion_is_named(approved):
    tamper("UPDATE reviews_interpretationversion SET conclusion = 'inconclusive', conclusion_text = 'no'")
    what = "What is shown differs from what was signed: conclusion, conclusion_text."
    assert damages() == {name(approved): {what}}


def test_altered_content_is_named(approved):
    altered = bytes(InterpretationVersion.objects.get().content).replace(b'"complies"', b'"compl1es"')
    tamper("UPDATE reviews_interpretationversion SET content = %s", altered)
    assert damages() == {name(approved): {"The stored content does not fit the hash that was signed."}}


def test_content_altered_together_with_its_hash_is_named(approved):
    from reviews import content

    altered = bytes(InterpretationVersion.objects.get().content).replace(b'"complies"', b'"compl1es"')
    tamper(
        "UPDATE reviews_interpretationversion SET content = %s, content_hash = %s", altered, content.hash_of(altered)
    )
    assert {"Its submission is not signed over this content.", "Its decision is not signed over this content."} <= (
        damages()[name(approved)]
    )


def test_a_swapped_signature_is_named(approved):
    decision = Decision.objects.get()
    tamper("UPDATE reviews_decision SET signature_id = %s", approved.submission_id)
    assert damages() == {
        name(approved): {
            "Its decision carries a signature that was made for something else.",
            "It was decided by somebody whose own work it is.",  # the signature is the analyst's
        },
        f"signature {decision.signature_id}": {f"What it signed on interpretation version {approved.pk} is gone."},
    }


def test_a_signature_taken_from_another_version_is_named(approved, cast, lab):
    other = builders.approved_version(cast, lab, lot="L-2")
    tamper(
        "UPDATE reviews_interpretationversion SET submission_id = %s WHERE id = %s", other.submission_id, approved.pk
    )
    assert "Its submission carries a signature that was made for something else." in damages()[name(approved)]


def test_a_decision_by_another_person_than_signed_is_named(approved, cast):
    tamper("UPDATE reviews_decision SET by_id = %s", cast.qa_manager.pk)
    found = damages()
    assert "Its decision carries a signature that was made for something else." in found[name(approved)]
    assert [what.rpartition(": ")[2] for what in found[f"{name(approved)}, decision"]] == ["by."]


def test_a_decision_by_somebody_whose_own_work_it_is_is_named(approved, cast):
    tamper(
        "INSERT INTO spectra_contribution (examination_id, user_id, kind, at)"
        " SELECT examination_id, %s, 'measured', at FROM spectra_contribution LIMIT 1",
        cast.reviewer.pk,
    )
    assert damages() == {name(approved): {"It was decided by somebody whose own work it is."}}


@pytest.mark.parametrize("state", ["submitted", "in_review", "rejected"])
def test_a_decision_undone_is_named(approved, state):
    tamper("UPDATE reviews_interpretationversion SET state = %s", state)
    assert damages() == {
        name(approved): {"Its state does not follow from its decision.", "It should be approved: so the trail says."}
    }


def test_a_withdrawal_without_one_is_named(approved):
    tamper("UPDATE reviews_interpretationversion SET state = 'withdrawn'")
    assert damages() == {
        name(approved): {"Its state does not follow from its withdrawal.", "It should be approved: so the trail says."}
    }


def test_a_decided_version_made_a_draft_again_is_named(approved):
    tamper("UPDATE reviews_interpretationversion SET state = 'draft'")
    assert "It was submitted, and was made a draft again." in damages()[name(approved)]


def test_an_approval_without_a_decision_is_named(cast, lab, quick_computing):
    version = builders.submitted_version(cast, lab)
    tamper("UPDATE reviews_interpretationversion SET state = 'approved'")
    assert damages() == {
        name(version): {
            "It is approved without a signed decision.",
            "It should be waiting for a second reading: so the trail says.",
        }
    }


def test_an_analysis_exchanged_under_a_signed_version_is_named(approved, cast, lab):
    other = builders.drafted_version(cast, lab, lot="L-2")
    tamper("UPDATE reviews_interpretationversion SET analysis_id = %s WHERE id = %s", other.analysis_id, approved.pk)
    assert damages() == {
        name(approved): {
            "What is shown differs from what was signed: analysis.id.",
            "The analysis is of another spectrum than the one that was signed as decisive.",
        }
    }


def test_a_removed_proposal_is_named_by_its_signature(cast, lab, quick_computing):
    version = builders.submitted_version(cast, lab)
    signature = version.submission_id
    Claim.objects.count()
    for statement in (
        "DELETE FROM reviews_mustseepoint",
        "DELETE FROM reviews_claim",
        "DELETE FROM reviews_interpretationversion",
    ):
        tamper(statement)
    assert damages() == {f"signature {signature}": {f"What it signed on interpretation version {version.pk} is gone."}}
