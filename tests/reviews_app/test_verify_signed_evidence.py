"""All that was signed with a proposal is compared with what pages show, and what differs is named by its key."""

from __future__ import annotations

import json

import pytest

from labsite.trail.verify import verify
from reviews import content
from reviews.models import InterpretationVersion
from reviews.services import drafts
from spectra.services import uploads
from tests import builders
from tests.cast import make_person
from tests.lifting import damages, tamper


@pytest.fixture
def approved(cast, lab, quick_computing):
    """Approved, with a replicate, an excluded spectrum and a refused file beside the decisive one."""
    row = builders.examination(cast, lab)
    builders.analysed_spectrum(cast, row)
    builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2), file_name="again.dx")
    other = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=3), file_name="torn.dx")
    uploads.change_role(spectrum_id=other.spectra.get().pk, by=cast.analyst, role="excluded", reason="The film tore.")
    assert builders.upload(row, cast.analyst, data=b"no spectrum at all\n", file_name="bad.dx").state == "refused"
    version = builders.version_of(row)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    builders.submit(version, cast.analyst)
    builders.reviewing.take(version_id=version.pk, by=cast.reviewer)
    builders.see_everything(version, cast.reviewer)
    fresh = InterpretationVersion.objects.get(pk=version.pk)
    builders.reviewing.approve(
        version_id=version.pk,
        by=cast.reviewer,
        proof=builders.proof_of(cast.reviewer),
        content_hash=fresh.content_hash,
    )
    assert verify().ok, verify().damages
    return InterpretationVersion.objects.get(pk=version.pk)


def name(version) -> str:
    return f"interpretation {version}"


@pytest.mark.parametrize(
    ("statement", "keys"),
    [
        ("UPDATE spectra_delivery SET lot = 'L-9'", "delivery.lot"),
        ("UPDATE spectra_delivery SET supplier = 'Supplier South'", "delivery.supplier"),
        ("UPDATE spectra_delivery SET received_on = '2026-03-01'", "delivery.received_on"),
        ("UPDATE spectra_sample SET code = 'S-2026-0999'", "samples"),
        ("UPDATE spectra_materialversion SET name = 'Methyl acetate'", "material.declared"),
        ("UPDATE spectra_procedure SET edition = 7", "procedure.edition"),
        ("UPDATE spectra_analysis SET core_version = 'other'", "analysis.core_version"),
        ("UPDATE spectra_reference SET code = 'R-9'", "analysis.reference.code"),
        ("UPDATE spectra_analysis SET reference_id = NULL", "analysis.reference"),
    ],
)
def test_each_key_that_was_signed_is_compared(approved, statement, keys):
    tamper(statement)
    assert f"What is shown differs from what was signed: {keys}." in damages()[name(approved)]


@pytest.mark.parametrize(
    ("change", "part"),
    [
        ("measured_by_id = %s", "measured_by"),
        ("arrays_sha256 = 'aa'", "arrays_sha256"),
        ("resolution_cm1 = 1.5", "resolution_cm1"),
        ("measured_at_text = 'yesterday'", "measured_at"),
        ("excluded_reason = 'No reason.'", "excluded_reason"),
        ("role = 'replicate'", "role"),
    ],
)
def test_a_changed_spectrum_is_named_by_its_file(approved, cast, change, part):
    values = (cast.outsider.pk,) if "%s" in change else ()
    tamper(f"UPDATE spectra_spectrum SET {change} WHERE role = 'excluded'", *values)
    what = f"The spectrum shown differs from the signed one: {part}."
    assert damages()[f"{name(approved)}, spectrum 1 of torn.dx"] == {what}


@pytest.mark.parametrize(
    ("change", "part"), [("file_name = 'other.dx'", "file"), ('answers = \'{"x_unit": "um"}\'', "answers.x_unit")]
)
def test_a_changed_upload_is_named_by_its_file(approved, change, part):
    tamper(f"UPDATE spectra_upload SET {change} WHERE file_name = 'again.dx'")
    what = f"The spectrum shown differs from the signed one: {part}."
    assert damages()[f"{name(approved)}, spectrum 1 of again.dx"] == {what}


def test_a_file_exchanged_under_a_spectrum_is_named(approved):
    tamper(
        "UPDATE spectra_upload SET raw_file_id = (SELECT raw_file_id FROM spectra_upload WHERE file_name = 'torn.dx')"
        " WHERE file_name = 'again.dx'"
    )
    found = damages()
    assert found[f"{name(approved)}, spectrum 1 of again.dx"] == {"The signed spectrum is gone."}


def test_a_refused_file_that_was_signed_and_one_that_was_not_are_named(approved):
    tamper("UPDATE spectra_upload SET problem_code = 'nothing.wrong' WHERE file_name = 'bad.dx'")
    assert damages()[f"{name(approved)}, file bad.dx"] == {
        "The refused file that was signed is gone.",
        "The refused file shown was never signed.",
    }


def test_an_analysis_moved_to_another_spectrum_is_named(approved):
    tamper(
        "UPDATE spectra_analysis SET spectrum_id = (SELECT s.id FROM spectra_spectrum s WHERE s.role = 'replicate')"
        " WHERE id = %s",
        approved.analysis_id,
    )
    found = damages()
    assert "The analysis is of another spectrum than the one that was signed as decisive." in found[name(approved)]
    assert f"analysis {approved.analysis_id}" in found


def test_a_hand_that_was_signed_and_is_gone_is_named(approved, cast):
    tamper("DELETE FROM spectra_contribution WHERE user_id = %s", cast.analyst.pk)
    what = "Somebody whose own work it was when it was signed is not among its contributors any more."
    assert damages() == {name(approved): {what}}


def test_a_decision_given_to_a_signed_hand_is_named_although_the_rows_forget_them(approved, cast):
    tamper("DELETE FROM spectra_contribution WHERE user_id = %s", cast.analyst.pk)
    tamper("UPDATE reviews_decision SET by_id = %s", cast.analyst.pk)
    tamper("UPDATE reviews_interpretationversion SET submitted_by_id = %s", cast.second_analyst.pk)
    assert "It was decided by somebody whose own work it is." in damages()[name(approved)]


def test_a_version_that_revises_another_than_signed_is_named(approved, cast):
    draft = drafts.revise(version_id=approved.pk, by=cast.analyst, reason="more to say")
    builders.confirm_all(draft, cast.analyst)
    builders.submit(draft, cast.analyst)
    assert verify().ok, verify().damages
    tamper("UPDATE reviews_interpretationversion SET revises_id = NULL WHERE id = %s", draft.pk)
    assert damages()[name(draft)] == {"What is shown differs from what was signed: revises."}


def test_what_a_later_version_brings_is_no_damage_to_the_earlier_one(approved, cast, lab):
    draft = drafts.revise(version_id=approved.pk, by=cast.second_analyst, reason="more to measure")
    row = approved.interpretation.examination
    builders.upload(row, cast.second_analyst, data=builders.jcamp_file(seed=8), file_name="later.dx")
    builders.upload(row, cast.second_analyst, data=b"nor this one\n", file_name="bad_later.dx")
    replicate = row.spectra.get(upload__file_name="again.dx")
    uploads.change_role(spectrum_id=replicate.pk, by=cast.second_analyst, role="excluded", reason="too thin")
    back = row.spectra.get(upload__file_name="torn.dx")
    uploads.change_role(spectrum_id=back.pk, by=cast.second_analyst, role="repeat", reason="it was not torn")
    assert verify().ok, verify().damages
    tamper("UPDATE spectra_spectrum SET excluded_reason = 'because' WHERE id = %s", replicate.pk)
    assert damages() == {
        f"spectrum 1 of again.dx, {row.code}": {
            "Its role, or the reason for its exclusion, is not the one that the trail recorded."
        }
    }
    tamper("UPDATE spectra_spectrum SET measured_by_id = %s WHERE id = %s", cast.outsider.pk, replicate.pk)
    assert f"{name(approved)}, spectrum 1 of again.dx" in damages()
    assert draft.number == 2


def test_a_retired_material_is_no_damage(approved, cast, lab):
    builders.master.retire_material(pk=lab.material.pk, by=cast.qa_manager, reason="no longer bought")
    assert verify().ok, verify().damages


def test_a_superseded_version_without_a_later_approved_one_is_named(approved):
    tamper("UPDATE reviews_interpretationversion SET state = 'superseded'")
    assert damages() == {
        name(approved): {
            "It is superseded, and no later version was approved.",
            "It should be approved: so the trail says.",
        }
    }


# One damaged row never hides the next.


@pytest.mark.parametrize("stored", ["text in place of bytes", b"{}", b"\xff\xfe"])
def test_a_version_whose_content_cannot_be_read_hides_nothing(approved, cast, lab, stored):
    other = builders.approved_version(cast, lab, lot="L-2")
    tamper("UPDATE reviews_interpretationversion SET content = %s WHERE id = %s", stored, approved.pk)
    tamper("UPDATE reviews_claim SET reason = 'because' WHERE key = 'group:ester' AND version_id = %s", other.pk)
    assert set(damages()) == {name(approved), f"{name(other)}, claim group:ester"}


@pytest.mark.parametrize("document", [b"{}", b"[]", b'{"claims": 3, "spectra": [{}]}'])
def test_a_document_of_another_form_under_its_own_hash_hides_nothing(approved, cast, lab, document):
    other = builders.approved_version(cast, lab, lot="L-2")
    tamper(
        "UPDATE reviews_interpretationversion SET content = %s, content_hash = %s WHERE id = %s",
        document,
        content.hash_of(document),
        approved.pk,
    )
    tamper("UPDATE reviews_claim SET reason = 'because' WHERE key = 'group:ester' AND version_id = %s", other.pk)
    found = damages()
    assert "Its submission is not signed over this content." in found[name(approved)]
    assert f"{name(other)}, claim group:ester" in found


def test_many_hands_are_compared_as_a_set(approved, cast):
    signed = json.loads(bytes(approved.content))["contributors"]
    tamper(
        "INSERT INTO spectra_contribution (examination_id, user_id, kind, at)"
        " SELECT examination_id, %s, 'measured', at FROM spectra_contribution LIMIT 1",
        make_person("newcomer", roles=("analyst",)).pk,
    )
    assert verify().ok, verify().damages
    assert len(signed) == 1
