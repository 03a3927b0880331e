"""The row is the truth: an analysis is claimed once, finished once, and taken up again when its worker is lost."""

from __future__ import annotations

import os
from datetime import timedelta

import pytest
from django.db import IntegrityError, OperationalError, transaction
from django.utils import timezone

from labsite.errors import NotAllowed, NotPossible, NotVisible
from labsite.trail.models import TrailEntry
from spectra import computing, hooks, queue, store, tasks
from spectra.core.errors import CoreError
from spectra.models import Analysis, Band, GroupFinding, ReferenceMatch
from spectra.services import analyses, uploads
from tests import builders

NOBODY = 2**22 - 3  # above the largest process number that Linux gives by default


@pytest.fixture
def analysis(cast, lab, rung):
    return builders.waiting_analysis(cast, lab)


def events() -> list[str]:
    return list(
        TrailEntry.objects.filter(event__startswith="analysis.").order_by("seq").values_list("event", flat=True)
    )


def test_an_analysis_is_done_once_and_a_second_message_does_nothing(analysis, quick_computing):
    assert analyses.execute(analysis_id=analysis.pk)
    assert not analyses.execute(analysis_id=analysis.pk)
    tasks.run_analysis(analysis.pk)
    analysis.refresh_from_db()
    assert (analysis.state, analysis.attempt, analysis.progress_percent) == ("done", 1, 100)
    assert quick_computing.calls == 1
    assert Band.objects.count() == 2 and GroupFinding.objects.count() == 4 and ReferenceMatch.objects.count() == 1
    assert store.get(analysis.curves_sha256) == quick_computing.outcome.curves
    assert events() == ["analysis.queued", "analysis.finished"]


def test_a_message_for_an_unknown_analysis_does_nothing(db):
    assert not analyses.execute(analysis_id=0)


def test_the_real_reading_ends_with_claims(cast, lab, rung):
    spectrum = builders.analysed_spectrum(cast, builders.examination(cast, lab))
    result = spectrum.analyses.get()
    assert result.state == "done" and result.environment["numpy"]
    version = builders.version_of(spectrum.examination)
    assert version.claims.filter(kind="identity").get().computed_verdict == "consistent"
    assert version.claims.filter(key="group:ester", computed_verdict="supported").exists()


def test_the_same_bytes_give_the_same_digest(cast, lab, rung):
    digests = set()
    for lot in ("A", "B"):
        digests.add(
            builders.analysed_spectrum(cast, builders.examination(cast, lab, lot=lot)).analyses.get().result_digest
        )
    assert len(digests) == 1


def test_progress_moves_the_heartbeat(analysis, monkeypatch):
    seen = []

    def compute(row, *, progress):
        progress("reading bands", 0.4)
        seen.append(Analysis.objects.get(pk=row.pk))
        return builders.fake_outcome()

    monkeypatch.setattr(computing, "compute", compute)
    assert analyses.execute(analysis_id=analysis.pk)
    assert (seen[0].state, seen[0].step, seen[0].progress_percent) == ("running", "reading bands", 40)
    assert seen[0].heartbeat > 1 and seen[0].worker_pid == os.getpid()


def test_input_that_cannot_carry_an_analysis_fails_it_with_the_reason(analysis, monkeypatch):
    def compute(row, *, progress):
        raise CoreError("trace.too_short", "Only 8 points.")

    monkeypatch.setattr(computing, "compute", compute)
    assert analyses.execute(analysis_id=analysis.pk)
    analysis.refresh_from_db()
    assert (analysis.state, analysis.problem_code, analysis.problem_text) == (
        "failed",
        "trace.too_short",
        "Only 8 points.",
    )
    assert events()[-1] == "analysis.failed"


def test_damaged_bytes_fail_the_analysis_by_name(analysis):
    path = store.path_of(analysis.spectrum.upload.raw_file.sha256)
    whole = path.read_bytes()
    path.chmod(0o640)
    path.write_bytes(whole[:-9] + b"X" + whole[-8:])
    try:
        assert analyses.execute(analysis_id=analysis.pk)
    finally:
        path.write_bytes(whole)  # the store is shared by the whole run
    analysis.refresh_from_db()
    assert (analysis.state, analysis.problem_code) == ("failed", "store.damaged")


def test_numbers_that_read_differently_today_fail_the_analysis(analysis):
    type(analysis.spectrum).objects.filter(pk=analysis.spectrum_id).update(arrays_sha256="0" * 64)
    assert analyses.execute(analysis_id=analysis.pk)
    analysis.refresh_from_db()
    assert analysis.problem_code == "reader.arrays_differ"


def test_a_fault_of_the_program_is_shown_and_raised(analysis, monkeypatch):
    monkeypatch.setattr(computing, "compute", lambda row, progress: 1 / 0)
    with pytest.raises(ZeroDivisionError):
        analyses.execute(analysis_id=analysis.pk)
    analysis.refresh_from_db()
    assert (analysis.state, analysis.problem_code) == ("failed", "analysis.broke")
    assert "ZeroDivisionError" in analysis.problem_text


def test_a_fault_while_claims_are_drafted_leaves_nothing_half_written(analysis, quick_computing, monkeypatch):
    def break_off(row):
        raise ValueError("no claims today")

    monkeypatch.setattr(hooks, "on_analysis_done", [break_off])
    with pytest.raises(ValueError):
        analyses.execute(analysis_id=analysis.pk)
    analysis.refresh_from_db()
    assert (analysis.state, analysis.problem_code, analysis.result) == ("failed", "analysis.broke", None)
    assert not Band.objects.exists()


def test_a_database_that_is_away_does_not_fail_the_analysis(analysis, monkeypatch):
    def compute(row, *, progress):
        raise OperationalError("server closed the connection")

    monkeypatch.setattr(computing, "compute", compute)
    with pytest.raises(OperationalError):
        analyses.execute(analysis_id=analysis.pk)
    analysis.refresh_from_db()
    assert analysis.state == "running"  # the lease runs out, and the sweep takes it up


# The sweep.


def test_a_worker_that_stands_still_for_a_lease_loses_its_analysis(analysis, rung, settings):
    analyses._claim(analysis.pk)
    watch = analyses.Watch()
    lease = settings.ANALYSIS_LEASE_SECONDS
    assert analyses.sweep(watch=watch, now_s=1000.0).taken_over == 0
    assert analyses.sweep(watch=watch, now_s=1000.0 + lease - 1).taken_over == 0
    swept = analyses.sweep(watch=watch, now_s=1000.0 + lease)
    assert (swept.taken_over, swept.failed, swept.stale_pids) == (1, 0, (os.getpid(),))
    analysis.refresh_from_db()
    assert (analysis.state, analysis.attempt) == ("queued", 1)
    assert events()[-1] == "analysis.taken_over"


def test_a_worker_that_moves_keeps_its_analysis(analysis, settings):
    attempt = analyses._claim(analysis.pk)
    watch = analyses.Watch()
    for round_number in range(5):
        analyses._beat(analysis.pk, attempt, "working", round_number / 5)
        swept = analyses.sweep(watch=watch, now_s=round_number * settings.ANALYSIS_LEASE_SECONDS * 0.9)
        assert swept.taken_over == 0


def test_a_clock_set_back_does_not_freeze_work(analysis, settings):
    analyses._claim(analysis.pk)
    Analysis.objects.filter(pk=analysis.pk).update(started_at=timezone.now() + timedelta(days=2))
    watch = analyses.Watch()
    analyses.sweep(watch=watch, now_s=0.0)
    assert analyses.sweep(watch=watch, now_s=float(settings.ANALYSIS_LEASE_SECONDS)).taken_over == 1


def test_an_analysis_whose_worker_no_longer_exists_is_taken_over_at_once(analysis):
    analyses._claim(analysis.pk)
    Analysis.objects.filter(pk=analysis.pk).update(worker_pid=NOBODY)
    swept = analyses.sweep(watch=analyses.Watch(), now_s=5.0)
    assert (swept.taken_over, swept.stale_pids) == (1, ())


def test_a_worker_on_another_machine_is_given_its_whole_lease(analysis, settings):
    analyses._claim(analysis.pk)
    Analysis.objects.filter(pk=analysis.pk).update(worker=f"elsewhere:{NOBODY}", worker_pid=NOBODY)
    watch = analyses.Watch()
    assert analyses.sweep(watch=watch, now_s=0.0).taken_over == 0
    swept = analyses.sweep(watch=watch, now_s=float(settings.ANALYSIS_LEASE_SECONDS))
    assert (swept.taken_over, swept.stale_pids) == (1, ())


def test_a_lost_workers_late_result_is_thrown_away(analysis, quick_computing):
    late_attempt = analyses._claim(analysis.pk)
    Analysis.objects.filter(pk=analysis.pk).update(worker_pid=NOBODY)
    analyses.sweep(watch=analyses.Watch(), now_s=0.0)
    assert analyses.execute(analysis_id=analysis.pk)
    first = Analysis.objects.get(pk=analysis.pk)
    other = builders.fake_outcome({**builders.RESULT, "bands": []})
    assert not analyses._finish(analysis.pk, late_attempt, other)
    assert not analyses._fail(analysis.pk, late_attempt, code="late", text="late")
    with pytest.raises(analyses.LeaseLost):
        analyses._beat(analysis.pk, late_attempt, "late", 0.9)
    again = Analysis.objects.get(pk=analysis.pk)
    assert (again.state, again.result_digest, again.attempt) == ("done", first.result_digest, 2)
    assert Band.objects.count() == 2


def test_a_lost_worker_stops_at_its_next_sign_of_life(analysis, monkeypatch):
    def compute(row, *, progress):
        Analysis.objects.filter(pk=row.pk).update(state="queued")  # the sweep was here
        progress("late", 0.5)
        raise AssertionError("it went on")

    monkeypatch.setattr(computing, "compute", compute)
    assert not analyses.execute(analysis_id=analysis.pk)
    assert Analysis.objects.get(pk=analysis.pk).state == "queued"


def test_after_three_lost_workers_the_analysis_is_given_up_and_can_be_tried_again(
    analysis, cast, rung, quick_computing
):
    for attempt in (1, 2, 3):
        assert analyses._claim(analysis.pk) == attempt
        Analysis.objects.filter(pk=analysis.pk).update(worker_pid=NOBODY)
        swept = analyses.sweep(watch=analyses.Watch(), now_s=0.0)
        assert (swept.taken_over, swept.failed) == ((0, 1) if attempt == 3 else (1, 0))
    analysis.refresh_from_db()
    assert (analysis.state, analysis.problem_code) == ("failed", "analysis.worker_lost")
    again = analyses.retry(analysis_id=analysis.pk, by=cast.analyst)
    assert again.pk != analysis.pk and again.attempt == 0
    assert analyses.execute(analysis_id=again.pk)
    assert Analysis.objects.get(pk=analysis.pk).state == "failed"


def test_what_waits_is_rung_for_again_and_a_fresh_one_is_left_in_peace(
    analysis, rung, django_capture_on_commit_callbacks
):
    assert analyses.sweep(watch=analyses.Watch(), now_s=0.0).rung == 0
    Analysis.objects.filter(pk=analysis.pk).update(queued_at=timezone.now() - timedelta(minutes=1))
    assert analyses.sweep(watch=analyses.Watch(), now_s=0.0).rung == 1
    assert rung == [analysis.pk]


def test_the_queue_is_rung_once_for_each_upload(cast, lab, monkeypatch, django_capture_on_commit_callbacks):
    ids = []
    monkeypatch.setattr(queue, "ring", ids.append)
    with django_capture_on_commit_callbacks(execute=True):
        analysis = builders.waiting_analysis(cast, lab)
    assert ids == [analysis.pk]


# Trying again.


def test_only_a_failed_analysis_is_tried_again_and_only_once(analysis, cast, quick_computing):
    with pytest.raises(NotPossible) as refused:
        analyses.retry(analysis_id=analysis.pk, by=cast.analyst)
    assert refused.value.code == "analysis.not_failed"
    attempt = analyses._claim(analysis.pk)
    analyses._fail(analysis.pk, attempt, code="x", text="y")
    with pytest.raises(NotAllowed):
        analyses.retry(analysis_id=analysis.pk, by=cast.reviewer)
    analyses.retry(analysis_id=analysis.pk, by=cast.second_analyst)
    with pytest.raises(NotPossible) as refused:
        analyses.retry(analysis_id=analysis.pk, by=cast.analyst)
    assert refused.value.code == "analysis.tried_again"
    with pytest.raises(NotVisible):
        analyses.retry(analysis_id=0, by=cast.analyst)


# What the database itself keeps.


@pytest.mark.parametrize("change", ["state = 'queued'", "result_digest = 'x'", "spectrum_id = spectrum_id"])
def test_a_finished_analysis_is_never_changed(analysis, quick_computing, change):
    from django.db import connection

    analyses.execute(analysis_id=analysis.pk)
    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(f"UPDATE spectra_analysis SET {change} WHERE id = %s", [analysis.pk])


@pytest.mark.parametrize(
    "table", ["spectra_analysis", "spectra_spectrum", "spectra_upload", "spectra_rawfile", "spectra_examination"]
)
def test_records_are_never_removed(analysis, table):
    from django.db import connection

    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(f"DELETE FROM {table}")


def test_a_later_analysis_speaks_and_an_earlier_one_that_comes_late_does_not(cast, lab, rung, quick_computing):
    row = builders.examination(cast, lab)
    first = builders.upload(row, cast.analyst).spectra.get()
    second = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    early = first.analyses.get()
    for spectrum in (second, first):
        uploads.change_role(spectrum_id=spectrum.pk, by=cast.analyst, role="decisive", reason="the better film")
    late = first.analyses.order_by("-pk").first()
    assert analyses.execute(analysis_id=late.pk)
    assert analyses.execute(analysis_id=early.pk)
    for analysis in second.analyses.all():
        assert analyses.execute(analysis_id=analysis.pk)
    assert builders.version_of(row).analysis == late


def test_a_replicate_speaks_for_nothing(cast, lab, rung, quick_computing):
    row = builders.examination(cast, lab)
    builders.upload(row, cast.analyst)
    second = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    assert analyses.execute(analysis_id=second.analyses.get().pk)
    assert not hasattr(row, "interpretation")
