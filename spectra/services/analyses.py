"""Analyses are queued, claimed under a lease, worked on outside any transaction, and finished once.

The row is the truth: it is committed before anybody is rung, a second message for it does nothing, and every write of a
worker names the attempt it belongs to, so that a worker that was given up cannot write over its successor.
"""

from __future__ import annotations

import os
import socket
from dataclasses import dataclass, field
from datetime import timedelta

from django.conf import settings
from django.db import OperationalError
from django.db.models import F
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import DomainError, NotPossible, NotVisible
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work
from spectra import computing, hooks, permissions, queue, selectors, store
from spectra.core.errors import CoreError
from spectra.models import (
    Analysis,
    AnalysisState,
    Band,
    GroupFinding,
    ImpurityFinding,
    ReferenceMatch,
    Spectrum,
)
from spectra.services.locking import locked_examination
from spectra.subjects import examination_subject


class LeaseLost(Exception):
    """Another attempt has taken this analysis over; what this one computed is thrown away."""


def worker_name() -> str:
    return f"{socket.gethostname()}:{os.getpid()}"


def _subject(analysis: Analysis) -> Subject:
    return examination_subject(analysis.spectrum.examination)


def _examination_of(analysis_id: int) -> int | None:
    return Analysis.objects.filter(pk=analysis_id).values_list("spectrum__examination_id", flat=True).first()


def queue_analysis(*, spectrum: Spectrum, by: User) -> Analysis:
    """Make the work order with the versions in force now. Call it inside a unit of work; rung after the commit."""
    examination = spectrum.examination
    material = examination.delivery.material_version
    analysis = Analysis.objects.create(
        spectrum=spectrum,
        method=examination.procedure.method,
        group_table=selectors.current_group_table(),
        material_version=material,
        reference=selectors.reference_for(material.material, technique=spectrum.technique, phase=material.phase),
        watch_list=material.watch_list,
        queued_by=by,
        queued_at=timezone.now(),
        step="waiting for a worker",
    )
    record(
        Event.ANALYSIS_QUEUED,
        by=by,
        subject=_subject(analysis),
        facts={
            "analysis": analysis.pk,
            "file": spectrum.upload.file_name,
            "block": spectrum.block_index,
            "method": analysis.method.number,
            "group_table": analysis.group_table.number,
            "reference": analysis.reference.code if analysis.reference else "",
            "watch_list": str(analysis.watch_list or ""),
        },
    )
    queue.ring_after_commit(analysis.pk)
    return analysis


def execute(*, analysis_id: int) -> bool:
    """Do the analysis if it waits. Returns whether this call finished it (False: somebody else has it, or had)."""
    attempt = _claim(analysis_id)
    if attempt is None:
        return False
    analysis = selectors.analysis_with_inputs(analysis_id)

    def progress(step: str, fraction: float) -> None:
        _beat(analysis_id, attempt, step, fraction)

    try:
        outcome = computing.compute(analysis, progress=progress)
        return _finish(analysis_id, attempt, outcome)
    except LeaseLost:
        return False
    except CoreError as error:
        return _fail(analysis_id, attempt, code=error.problem.code, text=error.problem.message)
    except DomainError as error:
        return _fail(analysis_id, attempt, code=error.code, text=error.message)
    except OperationalError:
        raise  # the database is away, which says nothing of the spectrum: the lease runs out and another attempt begins
    except Exception as error:  # the row must end in a state a person can see, whatever broke; the log has the rest
        _fail(analysis_id, attempt, code="analysis.broke", text=f"The program failed on this spectrum: {error!r}")
        raise


def _claim(analysis_id: int) -> int | None:
    with unit_of_work():
        analysis = Analysis.objects.select_for_update().filter(pk=analysis_id).first()
        if analysis is None or analysis.state != AnalysisState.QUEUED:
            return None
        analysis.state = AnalysisState.RUNNING
        analysis.attempt += 1
        analysis.worker = worker_name()
        analysis.worker_pid = os.getpid()
        analysis.heartbeat += 1
        analysis.started_at = timezone.now()
        analysis.step = "reading the file"
        analysis.progress_percent = 0
        analysis.save()
        return analysis.attempt


def _mine(analysis_id: int, attempt: int):
    return Analysis.objects.filter(pk=analysis_id, attempt=attempt, state=AnalysisState.RUNNING)


def _beat(analysis_id: int, attempt: int, step: str, fraction: float) -> None:
    percent = max(0, min(99, round(100 * fraction)))
    with unit_of_work():
        kept = _mine(analysis_id, attempt).update(
            heartbeat=F("heartbeat") + 1, step=step[:80], progress_percent=percent
        )
    if not kept:
        raise LeaseLost


def _finish(analysis_id: int, attempt: int, outcome: computing.Outcome) -> bool:
    curves_sha256 = store.put(outcome.curves)
    with unit_of_work():
        locked_examination(_examination_of(analysis_id))  # what is drafted from the result locks below it
        analysis = (
            _mine(analysis_id, attempt)
            .select_for_update(of=("self",))
            .select_related("spectrum__examination", "spectrum__upload")
            .first()
        )
        if analysis is None:
            return False
        analysis.result = outcome.result_bytes
        analysis.result_digest = outcome.digest
        analysis.curves_sha256 = curves_sha256
        analysis.core_version = outcome.core_version
        analysis.environment = outcome.environment
        analysis.state = AnalysisState.DONE
        analysis.step = "done"
        analysis.progress_percent = 100
        analysis.finished_at = timezone.now()
        analysis.save()
        _index(analysis, outcome.result)
        record(
            Event.ANALYSIS_FINISHED,
            by=None,
            subject=_subject(analysis),
            facts={
                "analysis": analysis.pk,
                "attempt": attempt,
                "result_digest": outcome.digest,
                "curves_sha256": curves_sha256,
                "core_version": outcome.core_version,
            },
        )
        hooks.analysis_done(analysis)
    return True


def _index(analysis: Analysis, result: dict) -> None:
    """Rows to search by; the result's own bytes stay the truth."""
    Band.objects.bulk_create(
        Band(
            analysis=analysis,
            number=number,
            position_cm1=band["position_cm1"],
            height_absorbance=band["height_absorbance"],
            snr=band.get("snr"),
            kind=band["kind"],
        )
        for number, band in enumerate(result.get("bands", ()), start=1)
    )
    GroupFinding.objects.bulk_create(
        GroupFinding(analysis=analysis, group=item["group"], verdict=item["verdict"], agrees=item["agrees"])
        for item in result.get("groups", ())
    )
    identity = result.get("identity")
    if identity and analysis.reference_id:
        ReferenceMatch.objects.create(
            analysis=analysis,
            reference_id=analysis.reference_id,
            verdict=identity["verdict"],
            agrees=identity["agrees"],
        )
    ImpurityFinding.objects.bulk_create(
        ImpurityFinding(
            analysis=analysis,
            name=item["name"],
            verdict=item["verdict"],
            estimate_fraction=item.get("estimate_fraction"),
            detection_limit_fraction=item.get("detection_limit_fraction"),
        )
        for item in (result.get("impurities") or {}).get("screened", ())
    )


def _fail(analysis_id: int, attempt: int, *, code: str, text: str) -> bool:
    with unit_of_work():
        analysis = (
            _mine(analysis_id, attempt).select_for_update(of=("self",)).select_related("spectrum__examination").first()
        )
        if analysis is None:
            return False
        _mark_failed(analysis, code=code, text=text)
    return True


def _mark_failed(analysis: Analysis, *, code: str, text: str) -> None:
    analysis.state = AnalysisState.FAILED
    analysis.step = "failed"
    analysis.problem_code, analysis.problem_text = code, text[:2000]
    analysis.finished_at = timezone.now()
    analysis.save()
    record(
        Event.ANALYSIS_FAILED,
        by=None,
        subject=_subject(analysis),
        facts={"analysis": analysis.pk, "attempt": analysis.attempt, "code": code},
        reason=text[:2000],
    )


def retry(*, analysis_id: int, by: User) -> Analysis:
    """Queue a failed analysis again; the failed row stays as it is."""
    permissions.require_analyst(by)
    with unit_of_work():
        locked_examination(_examination_of(analysis_id))
        failed = (
            Analysis.objects.select_for_update(of=("self",))
            .select_related("spectrum__examination__delivery__material_version", "spectrum__upload")
            .filter(pk=analysis_id)
            .first()
        )
        if failed is None:
            raise NotVisible("analysis.unknown", "There is no such analysis.")
        if failed.state != AnalysisState.FAILED:
            raise NotPossible("analysis.not_failed", "Only a failed analysis can be tried again.")
        if failed.spectrum.analyses.filter(pk__gt=failed.pk).exists():
            raise NotPossible("analysis.tried_again", "This analysis was tried again already.")
        hooks.evidence_may_change(failed.spectrum.examination, by)
        record(Event.ANALYSIS_RETRIED, by=by, subject=_subject(failed), facts={"analysis": failed.pk})
        return queue_analysis(spectrum=failed.spectrum, by=by)


@dataclass
class Watch:
    """What the sweep remembers between two rounds: the last heartbeat of each running analysis, and since when."""

    seen: dict[int, tuple[int, int, float]] = field(default_factory=dict)


@dataclass(frozen=True)
class Swept:
    rung: int
    taken_over: int
    failed: int
    stale_pids: tuple[int, ...]


RING_AGAIN_AFTER = timedelta(seconds=3)
RING_AT_MOST = 50


def sweep(*, watch: Watch, now_s: float) -> Swept:
    """One round: take over what no worker moves, ring again for what waits.

    `now_s` is the sweeper's own monotonic clock: a wall clock set back must not freeze work. An analysis whose worker
    on this machine no longer exists is taken over at once; any other when its heartbeat stood still for a whole lease.
    """
    taken, failed, pids = 0, 0, []
    running = {row.pk: row for row in Analysis.objects.filter(state=AnalysisState.RUNNING).order_by("pk")[:500]}
    for pk in list(watch.seen):
        if pk not in running:
            del watch.seen[pk]
    for row in running.values():
        attempt, heartbeat, since_s = watch.seen.get(row.pk, (0, 0, now_s))
        if (attempt, heartbeat) != (row.attempt, row.heartbeat):
            attempt, heartbeat, since_s = row.attempt, row.heartbeat, now_s
            watch.seen[row.pk] = (attempt, heartbeat, since_s)
        gone = _worker_is_gone(row)
        if not gone and now_s - since_s < settings.ANALYSIS_LEASE_SECONDS:
            continue
        ended = _take_over(row.pk, attempt, heartbeat)
        if ended is None:
            continue
        taken, failed = taken + (ended == AnalysisState.QUEUED), failed + (ended == AnalysisState.FAILED)
        if not gone and row.worker.split(":")[0] == socket.gethostname() and row.worker_pid:
            pids.append(row.worker_pid)
    waiting = Analysis.objects.filter(
        state=AnalysisState.QUEUED, queued_at__lt=timezone.now() - RING_AGAIN_AFTER
    ).order_by("queued_at", "pk")
    ids = list(waiting.values_list("pk", flat=True)[:RING_AT_MOST])
    for pk in ids:
        queue.ring(pk)
    return Swept(rung=len(ids), taken_over=taken, failed=failed, stale_pids=tuple(pids))


def _worker_is_gone(row: Analysis) -> bool:
    if row.worker.split(":")[0] != socket.gethostname() or not row.worker_pid:
        return False
    try:
        os.kill(row.worker_pid, 0)  # signal 0 asks whether the process exists and does nothing to it
    except ProcessLookupError:
        return True
    except PermissionError:
        return False
    return False


def _take_over(analysis_id: int, attempt: int, heartbeat: int) -> str | None:
    """Give the analysis back to the queue, or up after the last attempt. None when it moved in the meantime."""
    with unit_of_work():
        analysis = (
            _mine(analysis_id, attempt)
            .filter(heartbeat=heartbeat)
            .select_for_update(of=("self",))
            .select_related("spectrum__examination")
            .first()
        )
        if analysis is None:
            return None
        if analysis.attempt >= settings.ANALYSIS_ATTEMPTS:
            _mark_failed(
                analysis,
                code="analysis.worker_lost",
                text=f"The worker was lost in each of {analysis.attempt} attempts; the file may be what stops it.",
            )
            return AnalysisState.FAILED
        analysis.state = AnalysisState.QUEUED
        analysis.step = "waiting for a worker again"
        analysis.progress_percent = 0
        analysis.save(update_fields=["state", "step", "progress_percent"])
        record(
            Event.ANALYSIS_TAKEN_OVER,
            by=None,
            subject=_subject(analysis),
            facts={"analysis": analysis.pk, "attempt": analysis.attempt, "worker": analysis.worker},
            reason="Its worker stopped moving.",
        )
        queue.ring_after_commit(analysis.pk)
        return AnalysisState.QUEUED
