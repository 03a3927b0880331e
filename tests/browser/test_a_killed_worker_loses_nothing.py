"""`kill -9` of the worker in the middle of an analysis: another attempt ends it, once, by itself. No browser needed."""

from __future__ import annotations

import os
import signal
import time

from tests.browser.live import LiveLaboratory, wait_until

LOTS = 12


def bring_in(laboratory: LiveLaboratory) -> None:
    """Queue many analyses for the one worker, through the services, in a process of their own."""
    laboratory.run(
        "-c",
        f"""
import os
from datetime import date
os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labsite.settings")
import django
django.setup()
from labsite.accounts.models import User
from spectra.models import MaterialVersion
from spectra.services import receiving
from tests import builders
analyst = User.objects.get(username_key="analyst")
material = MaterialVersion.objects.get(material__code="EAC")
for number in range({LOTS}):
    delivery = receiving.register_delivery(
        by=analyst, material_version_id=material.pk, supplier="Supplier North", lot=f"K-{{number}}",
        received_on=date(2026, 3, 2),
    )
    builders.upload(delivery.examinations.get(), analyst, data=builders.jcamp_file(seed=number))
""",
    )


def running(laboratory: LiveLaboratory) -> tuple[int, int, int] | None:
    """(analysis, process, attempt) of the one that is worked on now."""
    rows = laboratory.rows(
        "SELECT id, worker_pid, attempt FROM spectra_analysis WHERE state = 'running' AND progress_percent > 0"
    )
    return rows[0] if rows else None


def parent_of(pid: int) -> int:
    with open(f"/proc/{pid}/stat", encoding="utf-8") as stat:
        return int(stat.read().rpartition(")")[2].split()[1])


def is_ours(laboratory: LiveLaboratory, pid: int) -> bool:
    """Whether the laboratory of this test started that process, directly or through others."""
    while pid > 1:
        if pid == laboratory.process.pid:
            return True
        pid = parent_of(pid)
    return False


def kill_in_the_middle(laboratory: LiveLaboratory) -> int:
    """End the whole worker while it is at an analysis; returns which one it left unfinished."""
    for _ in range(LOTS):
        analysis, pid, attempt = wait_until(lambda: running(laboratory), 60, "an analysis runs", every=0.01)
        assert is_ours(laboratory, pid)
        pool_of = parent_of(pid)  # the worker itself; the analysis runs in a process of its pool
        assert is_ours(laboratory, pool_of) and pool_of != laboratory.process.pid
        for process in (pid, pool_of):
            os.kill(process, signal.SIGKILL)
        time.sleep(0.1)
        if laboratory.rows("SELECT 1 FROM spectra_analysis WHERE id = ? AND state = 'done'", analysis):
            continue  # it was quicker than we were
        assert attempt == 1
        return analysis
    raise AssertionError("every analysis ended before its worker could be killed")


def test_an_analysis_whose_worker_is_killed_ends_once_and_by_itself(laboratory):
    before = laboratory.rows("SELECT count(*) FROM spectra_analysis")[0][0]
    bring_in(laboratory)
    left = kill_in_the_middle(laboratory)

    def all_done() -> bool:
        return laboratory.rows("SELECT count(*) FROM spectra_analysis WHERE state = 'done'")[0][0] == before + LOTS

    wait_until(all_done, 90, "all analyses are done", every=0.3)
    attempt, result, examination = laboratory.rows(
        "SELECT a.attempt, a.result_digest, s.examination_id FROM spectra_analysis a"
        " JOIN spectra_spectrum s ON s.id = a.spectrum_id WHERE a.id = ?",
        left,
    )[0]
    assert attempt == 2
    assert len(result) == 64
    events = dict(
        laboratory.rows(
            "SELECT event, count(*) FROM trail_trailentry WHERE subject_kind = 'examination' AND subject_id = ?"
            " AND event LIKE 'analysis.%' GROUP BY event",
            str(examination),
        )
    )
    assert events == {"analysis.queued": 1, "analysis.taken_over": 1, "analysis.finished": 1}
    bands = "SELECT count(*), count(DISTINCT number) FROM spectra_band WHERE analysis_id = ?"
    total, distinct = laboratory.rows(bands, left)[0]
    assert total == distinct > 0
    versions = (
        "SELECT count(*) FROM reviews_interpretationversion v JOIN reviews_interpretation i"
        " ON i.id = v.interpretation_id WHERE i.examination_id = ?"
    )
    assert laboratory.rows(versions, examination) == [(1,)]
    assert laboratory.manage("verify_trail").returncode == 0
