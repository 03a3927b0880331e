"""What was changed behind the application's back is named by verification."""

from __future__ import annotations

import pytest

from labsite.trail.verify import verify
from spectra import store
from spectra.models import Analysis
from tests import builders
from tests.lifting import tamper


@pytest.fixture
def done(cast, lab, quick_computing):
    spectrum = builders.analysed_spectrum(cast, builders.examination(cast, lab))
    assert verify().ok, verify().damages
    return spectrum.analyses.get()


def damages() -> list[tuple[str, str]]:
    result = verify()
    assert not result.ok
    return [(damage.where, damage.what) for damage in result.damages]


def one_byte_changed(sha256: str):
    path = store.path_of(sha256)
    whole = path.read_bytes()
    path.chmod(0o640)
    path.write_bytes(whole[:40] + bytes([whole[40] ^ 1]) + whole[41:])
    return path, whole


@pytest.mark.parametrize("which", ["raw file", "curves"])
def test_one_changed_byte_in_a_file_is_named(done, which):
    sha256 = done.spectrum.upload.raw_file.sha256 if which == "raw file" else done.curves_sha256
    path, whole = one_byte_changed(sha256)
    try:
        found = damages()
    finally:
        path.write_bytes(whole)  # the store is shared by the whole run
    assert [where for where, _ in found] == [f"{which} {sha256}"]


def test_a_lost_file_is_named(done):
    path = store.path_of(done.spectrum.upload.raw_file.sha256)
    whole = path.read_bytes()
    path.unlink()
    try:
        assert damages() == [(f"raw file {path.name}", "These bytes are not in the store.")]
    finally:
        path.write_bytes(whole)


def test_a_changed_result_is_named(done):
    changed = bytes(done.result).replace(b'"supported"', b'"undecided"')
    tamper("UPDATE spectra_analysis SET result = %s WHERE id = %s", changed, done.pk)
    assert (f"analysis {done.pk}", "The stored result does not fit its digest.") in damages()


def test_a_result_changed_together_with_its_digest_is_named(done):
    changed = builders.fake_outcome({**builders.RESULT, "bands": []})
    tamper(
        "UPDATE spectra_analysis SET result = %s, result_digest = %s WHERE id = %s",
        changed.result_bytes,
        changed.digest,
        done.pk,
    )
    assert (f"analysis {done.pk}", "Its result is not the one that the trail recorded: result_digest.") in damages()


def test_a_finished_analysis_made_to_wait_again_is_named(done):
    tamper("UPDATE spectra_analysis SET state = 'queued' WHERE id = %s", done.pk)
    assert [where for where, _ in damages()] == [f"analysis {done.pk}"]


def test_an_invented_analysis_is_named(done):
    fields = [f for f in Analysis._meta.concrete_fields if not f.primary_key]
    names = ", ".join(f'"{f.column}"' for f in fields)
    chosen = ", ".join("'" + "a" * 64 + "'" if f.name == "result_digest" else f'"{f.column}"' for f in fields)
    tamper(f"INSERT INTO spectra_analysis ({names}) SELECT {chosen} FROM spectra_analysis WHERE id = %s", done.pk)
    invented = Analysis.objects.order_by("-pk").first()
    assert {where for where, _ in damages()} == {f"analysis {invented.pk}"}


@pytest.mark.parametrize(
    ("table", "change", "where"),
    [
        ("spectra_materialversion", "forbidden_groups = '[\"ester\"]'", "material Ethyl acetate"),
        ("spectra_procedure", "extra_bands_allowed = 99", "procedure IR-01, edition 1"),
        ("spectra_methodversion", "core_version = 'other'", "method method version 1"),
        ("spectra_grouptable", "text = 'empty'", "group_table group table version 1"),
        ("spectra_reference", "spectrum_valid_until = '2100-01-01'", "reference R-1 Ethyl acetate standard"),
    ],
)
def test_an_approved_record_changed_behind_the_applications_back_is_named(done, table, change, where):
    tamper(f"UPDATE {table} SET {change}")
    assert (where, "Its content differs from what was approved.") in damages()


def test_a_record_approved_without_a_signature_is_named(cast, done):
    draft = builders.draft_material(cast, code="NEW", name="Something new")
    tamper("UPDATE spectra_materialversion SET state = 'approved' WHERE id = %s", draft.pk)
    assert damages() == [
        ("material Something new", "It is marked approved without a signature over its content."),
        ("material Something new", "The trail says that it is draft."),
    ]


def test_an_approval_borrowed_from_another_record_is_named(cast, done, lab):
    draft = builders.draft_material(cast, code="NEW", name="Something new")
    tamper(
        "UPDATE spectra_materialversion SET state = 'approved', content_hash = %s, approval_id = %s,"
        " approved_by_id = %s WHERE id = %s",
        lab.material.content_hash,
        lab.material.approval_id,
        cast.qa_manager.pk,
        draft.pk,
    )
    assert {what for where, what in damages() if where == "material Something new"} == {
        "Its approval carries a signature that was made for something else.",
        "Its content differs from what was approved.",
        "The trail says that it is draft.",
    }


def test_an_approved_record_made_a_draft_again_is_named(done, lab):
    tamper("UPDATE spectra_materialversion SET state = 'draft' WHERE id = %s", lab.material.pk)
    assert damages() == [
        ("material Ethyl acetate", "It was approved, and was made a draft again."),
        ("material Ethyl acetate", "The trail says that it is approved."),
    ]
