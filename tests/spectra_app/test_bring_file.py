"""A file is brought to an examination: read, refused with its reason, or waiting for a person's answer."""

from __future__ import annotations

import pytest

from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible
from labsite.trail.models import TrailEntry
from spectra import queue, store
from spectra.models import Analysis, Contribution, RawFile, Spectrum, Upload
from spectra.services import uploads
from spectra.services.uploads import MeasurementFacts, clean_file_name
from tests import builders
from tests.cast import make_person


@pytest.fixture
def row(cast, lab):
    return builders.examination(cast, lab)


def events(kind: str) -> int:
    return TrailEntry.objects.filter(event=kind).count()


def test_a_file_is_read_stored_and_queued(cast, row, lab):
    data = builders.jcamp_file(title="film of the lot", headers={"RESOLUTION": "2", "LONGDATE": "2026/03/02 09:10:00"})
    upload = builders.upload(row, cast.analyst, data=data)
    assert upload.state == "read" and upload.problem_code == ""
    assert store.get(upload.raw_file.sha256) == data
    spectrum = upload.spectra.get()
    assert spectrum.role == "decisive" and spectrum.title == "film of the lot"
    assert spectrum.technique == "transmission" and spectrum.ordinate_used == "absorbance"
    assert spectrum.points == 1676 and (spectrum.first_cm1, spectrum.last_cm1) == (650.0, 4000.0)
    assert spectrum.resolution_cm1 == 2.0 and spectrum.measured_at_text == "2026/03/02 09:10:00"
    assert str(spectrum.accessory) == "FT-1 / cell holder"
    analysis = spectrum.analyses.get()
    assert (analysis.state, analysis.reference, analysis.method) == ("queued", lab.reference, lab.method)
    assert (analysis.material_version, analysis.group_table) == (lab.material, lab.table)


def test_whoever_prepared_measured_or_uploaded_is_noted(cast, row):
    builders.upload(row, cast.analyst, prepared_by_id=cast.second_analyst.pk, measured_by_id=cast.reviewer.pk)
    noted = set(Contribution.objects.values_list("user__username", "kind"))
    assert noted == {("analyst", "uploaded"), ("second_analyst", "prepared"), ("reviewer", "measured")}


def test_a_refused_file_keeps_its_reason_and_its_bytes(cast, row):
    upload = builders.upload(row, cast.analyst, data=b"\x00\x01\x02 no spectrum", file_name="scan.dx")
    assert upload.state == "refused" and upload.problem_code.startswith("reader.") and upload.problem_text
    assert store.get(upload.raw_file.sha256) == b"\x00\x01\x02 no spectrum"
    assert not Spectrum.objects.exists() and not Analysis.objects.exists()
    assert events("raw_file.refused") == 1


@pytest.mark.parametrize(
    "data",
    [
        b"",
        b"%PDF-1.7 something",
        b"\xff\xfe\x00\xd8",
        builders.jcamp_file(y_units="VOLTS"),
        builders.jcamp_file().replace(b"DATA TYPE=INFRARED SPECTRUM", b"DATA TYPE=NMR SPECTRUM"),
        b"\n".join(line for line in builders.jcamp_file().split(b"\n") if not line.startswith(b"2010 ")),
    ],
    ids=["empty", "another format", "half a character", "another quantity", "another method", "a lost line"],
)
def test_what_cannot_be_trusted_is_refused_with_a_reason(cast, row, data):
    upload = builders.upload(row, cast.analyst, data=data)
    assert upload.state in ("refused", "needs_answer")
    assert upload.problem_code and upload.problem_text
    assert not Spectrum.objects.exists()


def test_a_refused_file_may_be_brought_again(cast, row):
    for _ in range(2):
        builders.upload(row, cast.analyst, data=b"nothing in here")
    assert Upload.objects.count() == 2 and RawFile.objects.count() == 2  # one of them the reference's


def test_a_file_that_leaves_something_open_waits_and_is_read_once_answered(cast, row):
    upload = builders.upload(row, cast.analyst, data=builders.table_file(), file_name="film.txt")
    asked = []
    while upload.state == "needs_answer":
        asked.append(upload.question)
        assert len(asked) < 4, asked
        answers = {"x_unit": "cm-1", "ordinate": "absorbance", "columns": "2"}
        upload = uploads.answer_upload(
            upload_id=upload.pk,
            by=cast.analyst,
            answers={upload.question: answers[upload.question]},
            facts=MeasurementFacts(),
        )
    assert asked and "ordinate" in asked
    assert upload.state == "read", upload.problem_text
    assert upload.spectra.get().ordinate_used == "absorbance"
    assert upload.answers["ordinate"] == "absorbance"
    assert events("raw_file.answered") == len(asked)
    with pytest.raises(NotPossible):
        uploads.answer_upload(upload_id=upload.pk, by=cast.analyst, answers={}, facts=MeasurementFacts())


def test_what_was_stated_beside_a_file_still_holds_once_it_is_answered(cast, row):
    upload = builders.upload(
        row,
        cast.analyst,
        data=builders.table_file(),
        role="background",
        prepared_by_id=cast.reviewer.pk,
        resolution_cm1=8.0,
    )
    while upload.state == "needs_answer":
        answers = {"x_unit": "cm-1", "ordinate": "absorbance", "columns": "2"}
        upload = uploads.answer_upload(
            upload_id=upload.pk,
            by=cast.second_analyst,
            answers={upload.question: answers[upload.question]},
            facts=MeasurementFacts(scans=32),
        )
    spectrum = upload.spectra.get()
    assert (spectrum.role, spectrum.prepared_by, spectrum.measured_by) == (
        "background",
        cast.reviewer,
        cast.second_analyst,
    )
    assert (spectrum.resolution_cm1, spectrum.scans) == (8.0, 32)
    assert Contribution.objects.filter(user=cast.reviewer, kind="prepared").exists()


def test_an_answer_that_is_no_choice_is_refused(cast, row):
    upload = builders.upload(row, cast.analyst, data=builders.table_file())
    for answers in ({"ordinate": "loudness"}, {"x_unit": "furlong"}, {"columns": "two"}):
        with pytest.raises(BadInput):
            uploads.answer_upload(upload_id=upload.pk, by=cast.analyst, answers=answers, facts=MeasurementFacts())
    assert Upload.objects.get().state == "needs_answer"


def test_the_same_bytes_twice_are_refused_in_one_examination_and_shared_between_two(cast, lab, row):
    builders.upload(row, cast.analyst)
    with pytest.raises(NotPossible) as refused:
        builders.upload(row, cast.analyst, file_name="other name.dx")
    assert refused.value.code == "upload.same_bytes"
    builders.upload(builders.examination(cast, lab, lot="L-2"), cast.analyst)
    assert RawFile.objects.count() == 2  # the reference's and the sample's
    assert Upload.objects.count() == 2


def test_the_same_bytes_twice_do_not_wait_for_two_answers(cast, row):
    builders.upload(row, cast.analyst, data=builders.table_file())
    with pytest.raises(NotPossible):
        builders.upload(row, cast.analyst, data=builders.table_file())


@pytest.mark.parametrize(
    ("sent", "kept"),
    [
        ("../../etc/passwd", "passwd"),
        ("..\\..\\boot.ini", "boot.ini"),
        ("/some/where/film.dx", "film.dx"),
        ("..", "unnamed"),
        ("", "unnamed"),
        ("a\x00b\n.dx", "ab.dx"),
        ("\ud800.dx", ".dx"),
        ("x" * 400, "x" * 255),
        ("<script>alert(1)</script>.dx", "script>.dx"),
    ],
)
def test_a_hostile_name_is_a_label_and_never_a_path(sent, kept):
    assert clean_file_name(sent) == kept


def test_a_hostile_name_reaches_no_file(cast, row, settings):
    upload = builders.upload(row, cast.analyst, file_name="../../escaped.dx")
    assert upload.file_name == "escaped.dx"
    assert store.path_of(upload.raw_file.sha256).parent.parent == settings.FILES_DIR
    assert not list(settings.DATA_DIR.rglob("escaped*"))


def test_markup_in_a_title_is_kept_as_text(cast, row):
    data = builders.jcamp_file(title="<script>alert('x')</script>")
    assert builders.upload(row, cast.analyst, data=data).spectra.get().title == "<script>alert('x')</script>"


def test_nul_bytes_and_odd_letters_in_headers_are_stored_on_every_database(cast, row):
    data = builders.jcamp_file(
        title="film\x00one",
        headers={"LONGDATE": "2026\x00/03/02", "DATAPROCESSING": "smooth\x00ed", "RESOLUTION": "4\x00"},
    )
    upload = builders.upload(row, cast.analyst, data=data)
    upload.refresh_from_db()
    kept = [upload.problem_text, *upload.spectra.values_list("title", "measured_at_text", "already_processed")]
    assert "\x00" not in repr(kept)


def test_a_second_file_is_a_replicate_and_is_analysed_beside_the_first(cast, row):
    builders.upload(row, cast.analyst)
    second = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    assert second.role == "replicate" and second.analyses.get().state == "queued"


def test_a_background_does_not_decide(cast, row):
    spectrum = builders.upload(row, cast.analyst, role="background").spectra.get()
    assert spectrum.role == "background" and not spectrum.analyses.exists()
    assert builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get().role == "decisive"


def test_a_second_decisive_spectrum_is_refused(cast, row):
    builders.upload(row, cast.analyst, role="decisive")
    with pytest.raises(NotPossible) as refused:
        builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2), role="decisive")
    assert refused.value.code == "spectrum.decisive_there"
    assert Upload.objects.count() == 1


def test_a_file_of_several_blocks_gives_one_decisive_spectrum(cast, row):
    blocks = [builders.jcamp_file(title=f"block {n}", seed=n).decode() for n in (1, 2, 3)]
    link = "##TITLE=three films\n##JCAMP-DX=4.24\n##DATA TYPE=LINK\n##BLOCKS=4\n" + "".join(blocks) + "##END=\n"
    upload = builders.upload(row, cast.analyst, data=link.encode(), role="decisive")
    assert upload.state == "read", upload.problem_text
    assert [s.role for s in upload.spectra.order_by("block_index")] == ["decisive", "replicate", "replicate"]
    assert Analysis.objects.count() == 3


@pytest.mark.parametrize(
    ("facts", "code"),
    [
        ({"role": "excluded"}, "spectrum.role"),
        ({"role": "king"}, "spectrum.role"),
        ({"prepared_by_id": 0}, "spectrum.unknown_person"),
        ({"measured_by_id": 999_999}, "spectrum.unknown_person"),
        ({"resolution_cm1": -4.0}, "spectrum.resolution"),
        ({"resolution_cm1": float("nan")}, "spectrum.resolution"),
        ({"scans": 0}, "spectrum.scans"),
        ({"technique": "telepathy"}, "upload.answer_not_understood"),
        ({"accessory_id": 0}, "accessory.unknown"),
    ],
)
def test_a_fact_that_cannot_be_is_refused_and_nothing_is_written(cast, row, facts, code):
    with pytest.raises(BadInput) as refused:
        builders.upload(row, cast.analyst, **facts)
    assert refused.value.code == code
    assert not Upload.objects.exists()


def test_an_accessory_of_another_technique_is_refused(cast, lab, row):
    accessory = lab.instrument.accessories.get()
    with pytest.raises(BadInput) as refused:
        builders.upload(row, cast.analyst, technique="atr", accessory_id=accessory.pk)
    assert refused.value.code == "accessory.other_technique"


def test_only_an_analyst_brings_files(cast, row):
    for person in (cast.reviewer, cast.qa_manager, cast.method_owner, cast.administrator, cast.outsider):
        with pytest.raises(NotAllowed):
            builders.upload(row, person)


def test_an_unknown_examination_is_not_there(cast, lab):
    with pytest.raises(NotVisible):
        uploads.bring_file(examination_id=0, by=cast.analyst, file_name="x", data=b"x", facts=MeasurementFacts())


@pytest.mark.django_db(transaction=True)
def test_a_broker_that_is_down_does_not_break_an_upload(lab, cast, row, monkeypatch, caplog):
    from spectra import tasks

    def refuse(*args, **kwargs):
        raise OSError("connection refused")

    monkeypatch.setattr(tasks.run_analysis, "apply_async", refuse)
    upload = builders.upload(row, cast.analyst)
    assert upload.state == "read" and Analysis.objects.get().state == "queued"
    assert "connection refused" in caplog.text


@pytest.mark.django_db(transaction=True)
def test_the_message_follows_the_commit(lab, cast, row, monkeypatch):
    from django.db import connection

    seen = []
    monkeypatch.setattr(queue, "ring", lambda pk: seen.append((pk, connection.in_atomic_block)))
    builders.upload(row, cast.analyst)
    assert seen == [(Analysis.objects.get().pk, False)]


def test_a_person_who_holds_two_roles_still_uploads(lab, row):
    both = make_person("both", roles=("analyst", "reviewer"))
    assert builders.upload(row, both).state == "read"
