"""Files, spectra, deliveries, samples, instrument checks and approvals are compared with the trail, both ways."""

from __future__ import annotations

import pytest

from labsite.trail.verify import Damage, verify
from spectra.integrity.rows import settled
from spectra.models import InstrumentCheck, Spectrum
from spectra.services import uploads
from spectra.services.uploads import MeasurementFacts
from tests import builders
from tests.lifting import tamper


@pytest.fixture
def done(cast, lab, quick_computing):
    spectrum = builders.analysed_spectrum(cast, builders.examination(cast, lab))
    assert verify().ok, verify().damages
    return spectrum


def damages() -> dict[str, set[str]]:
    result = verify()
    assert not result.ok
    found: dict[str, set[str]] = {}
    for damage in result.damages:
        found.setdefault(damage.where, set()).add(damage.what)
    return found


def said(found: dict[str, set[str]]) -> str:
    return "\n".join(f"{where}: {what}" for where, whats in sorted(found.items()) for what in sorted(whats))


@pytest.mark.parametrize(
    ("statement", "where", "part"),
    [
        ("UPDATE spectra_delivery SET lot = 'L-9'", "delivery D-", "lot"),
        ("UPDATE spectra_delivery SET supplier = 'Supplier South'", "delivery D-", "supplier"),
        ("UPDATE spectra_delivery SET containers_total = 4", "delivery D-", "containers_total"),
        ("UPDATE spectra_container SET number = 8", "delivery D-", "containers_total"),
        ("UPDATE spectra_container SET number = 8", "sample S-", "containers"),
        ("DELETE FROM spectra_sample_containers", "sample S-", "containers"),
        ("UPDATE spectra_sample SET kind = 'composite'", "sample S-", "kind"),
        ("UPDATE spectra_sample SET form = 'a powder'", "sample S-", "appearance"),
        ("DELETE FROM spectra_examination_samples", "examination E-", "samples"),
        ("UPDATE spectra_procedure SET edition = 3", "examination E-", "edition"),
        ("UPDATE spectra_spectrum SET technique = 'atr'", "spectrum 1 of film.dx", "technique"),
        ("UPDATE spectra_spectrum SET points = 12", "spectrum 1 of film.dx", "points"),
        ("UPDATE spectra_spectrum SET first_cm1 = 400", "spectrum 1 of film.dx", "range_cm1"),
        ("UPDATE spectra_spectrum SET ordinate_used = 'transmittance'", "spectrum 1 of film.dx", "ordinate"),
        ("UPDATE spectra_spectrum SET arrays_sha256 = 'aa'", "spectrum 1 of film.dx", "arrays_sha256"),
        ("UPDATE spectra_analysis SET reference_id = NULL", "analysis", "reference"),
        ("UPDATE spectra_methodversion SET number = 9", "analysis", "method"),
    ],
)
def test_a_row_that_differs_from_its_entry_is_named_with_the_part(done, statement, where, part):
    tamper(statement)
    lines = [line for line in said(damages()).splitlines() if line.startswith(where)]
    assert any("differs from what entry" in line and line.endswith(f": {part}.") for line in lines), lines


def test_a_sample_moved_to_another_delivery_is_named(done, cast, lab):
    other = builders.delivery(cast, lab, lot="L-2")
    tamper("UPDATE spectra_sample SET delivery_id = %s", other.pk)
    assert sum(where.startswith("sample S-") for where in damages()) == 1


def test_a_lost_upload_is_named_with_its_bytes(done, cast):
    row = done.examination
    lost = builders.upload(row, cast.analyst, data=b"not a spectrum\n", file_name="bad.dx")
    sha256 = lost.raw_file.sha256
    tamper("DELETE FROM spectra_upload WHERE id = %s", lost.pk)
    tamper("DELETE FROM spectra_rawfile WHERE id = %s", lost.raw_file_id)
    text = said(damages())
    assert text.startswith("file bad.dx of ") and sha256 in text and text.endswith("it is gone.")


def test_an_upload_without_an_entry_is_named(done):
    tamper("UPDATE spectra_upload SET file_name = 'other.dx'")
    found = damages()
    assert found[f"file other.dx of {done.examination.code}"] == {
        "No entry of the trail says that it was brought in.",
    }
    assert any(where.startswith("file film.dx of") for where in found)


def test_changed_answers_and_a_changed_size_are_named(done, cast):
    row = done.examination
    asked = builders.upload(row, cast.analyst, data=builders.table_file(), file_name="two_columns.txt")
    assert asked.state == "needs_answer"
    uploads.answer_upload(
        upload_id=asked.pk,
        by=cast.analyst,
        answers={"x_unit": "cm-1", "ordinate": "absorbance"},
        facts=MeasurementFacts(),
    )
    assert verify().ok, verify().damages
    tamper("UPDATE spectra_upload SET answers = '{}' WHERE id = %s", asked.pk)
    tamper("UPDATE spectra_rawfile SET size_bytes = 1 WHERE id = %s", done.upload.raw_file_id)
    found = damages()
    assert "Its answers are not the ones that the trail recorded." in found[f"file two_columns.txt of {row.code}"]
    assert "Its size is not the one" in said(found)


def test_a_lost_spectrum_is_named(done, cast):
    other = builders.upload(
        done.examination, cast.analyst, data=builders.jcamp_file(seed=5), file_name="b.dx", role="blank"
    )
    tamper("DELETE FROM spectra_spectrum WHERE upload_id = %s", other.pk)
    text = said(damages())
    assert text.startswith("spectrum 1 of b.dx, ") and text.endswith("says that it was read; it is gone.")


def test_a_spectrum_brought_in_behind_the_applications_back_is_named(done):
    fields = [f for f in Spectrum._meta.concrete_fields if not f.primary_key]
    names = ", ".join(f'"{f.column}"' for f in fields)
    other = {"block_index": "1", "role": "'replicate'"}
    chosen = ", ".join(other.get(f.name, f'"{f.column}"') for f in fields)
    tamper(f"INSERT INTO spectra_spectrum ({names}) SELECT {chosen} FROM spectra_spectrum")
    assert damages() == {
        f"spectrum 2 of film.dx, {done.examination.code}": {"No entry of the trail says that it was read."}
    }


def test_a_role_that_nobody_gave_is_named(done, cast):
    builders.upload(done.examination, cast.analyst, data=builders.jcamp_file(seed=5), file_name="b.dx", role="blank")
    tamper("UPDATE spectra_spectrum SET role = 'background' WHERE role = 'blank'")
    assert list(damages()) == [f"spectrum 1 of b.dx, {done.examination.code}"]


@pytest.mark.parametrize(
    "change", ["verdict = 'failed'", "valid_until = '2099-01-01 00:00:00'", "note = 'fine'", "recorded_by_id = %s"]
)
def test_a_changed_instrument_check_is_named(done, cast, change):
    values = (cast.outsider.pk,) if "%s" in change else ()
    tamper(f"UPDATE spectra_instrumentcheck SET {change}", *values)
    row = InstrumentCheck.objects.get()
    found = damages()
    assert f"instrument check {row.pk} of FT-1 / cell holder" in found and len(found) == 2


def test_a_lost_instrument_check_is_named(done):
    tamper("DELETE FROM spectra_instrumentcheck")
    assert "cell holder" in said(damages())


def test_an_approved_record_that_was_unapproved_altogether_is_named_by_its_signature(done, lab):
    tamper(
        "UPDATE spectra_grouptable SET state = 'draft', approval_id = NULL, approved_by_id = NULL, content_hash = ''"
    )
    assert damages() == {
        "group_table group table version 1": {"The trail says that it is approved."},
        f"signature {lab.table.approval_id}": {
            f"What it approved, group_table {lab.table.pk}, is gone or carries it no longer."
        },
    }


def test_an_approved_record_that_was_deleted_is_named_by_its_signature(done, cast, lab):
    extra = builders.approved("reference", builders.register_reference(cast, lab.material, code="R-2", seed=91), cast)
    tamper("DELETE FROM spectra_reference WHERE id = %s", extra.pk)
    assert damages() == {
        f"signature {extra.approval_id}": {f"What it approved, reference {extra.pk}, is gone or carries it no longer."}
    }


def test_one_signature_for_two_records_is_named(done, cast, lab):
    extra = builders.approved("reference", builders.register_reference(cast, lab.material, code="R-2", seed=91), cast)
    tamper("UPDATE spectra_reference SET approval_id = %s WHERE id = %s", lab.reference.approval_id, extra.pk)
    found = damages()
    assert found[f"signature {lab.reference.approval_id}"] == {"More than one record carries it as its approval."}
    assert f"signature {extra.approval_id}" in found


def test_a_retired_record_put_in_force_again_is_named(done, cast, lab):
    builders.master.retire_material(pk=lab.material.pk, by=cast.qa_manager, reason="no longer bought")
    assert verify().ok, verify().damages
    tamper("UPDATE spectra_materialversion SET state = 'approved'")
    assert damages() == {"material Ethyl acetate": {"The trail says that it is retired."}}


def test_a_result_that_is_text_hides_no_other(done, cast, lab):
    other = builders.analysed_spectrum(cast, builders.examination(cast, lab, lot="L-2"))
    first, second = done.analyses.get(), other.analyses.get()
    tamper("UPDATE spectra_analysis SET result = %s WHERE id = %s", "text in place of bytes", first.pk)
    tamper("UPDATE spectra_analysis SET result_digest = 'aa' WHERE id = %s", second.pk)
    assert set(damages()) == {f"analysis {first.pk}", f"analysis {second.pk}"}


def test_what_people_do_while_a_check_runs_is_no_damage(cast, lab):
    tries = []

    def check():
        tries.append(1)
        if len(tries) == 1:
            builders.delivery(cast, lab, lot="L-2")
            yield Damage("something", "It looks wrong, for it was just changed.")

    assert settled(check) == [] and len(tries) == 2


def test_damage_is_told_although_people_go_on_working(cast, lab):
    def check():
        builders.delivery(cast, lab)
        yield Damage("something", "It is wrong.")

    assert settled(check) == [Damage("something", "It is wrong.")]
