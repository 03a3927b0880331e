"""The supervisor behind `manage.py start`: children that end are started again, and none outlives it."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]

# A supervisor of the programs given as NAME=CODE, with times short enough for a test.
DRIVER = """
import sys
from labsite import supervisor

def on_line(line):
    if line.startswith("stale-worker "):
        print("killed" if boss.kill_worker_process(int(line.split()[1])) else "left alone", flush=True)
        return True
    return False

programs = []
for argument in sys.argv[1:]:
    name, code = argument.split("=", 1)
    programs.append(supervisor.Program(name, (sys.executable, "-c", code), on_line if name == "sweep" else None))
boss = supervisor.Supervisor(
    programs, environment={"PATH": "/usr/bin:/bin", "PYTHONUNBUFFERED": "1"}, say=lambda text: print(text, flush=True),
    back_off=(0.1, 0.2), grace_seconds=1.0,
)
sys.exit(boss.run())
"""

SLEEPER = "import os, time; print('pid', os.getpid()); time.sleep(60)"
STUBBORN = (
    "import os, signal, time; signal.signal(signal.SIGTERM, signal.SIG_IGN); print('pid', os.getpid()); time.sleep(60)"
)
# Its own child is told about, and is left behind when the parent is killed.
FAMILY = (
    "import os, subprocess, sys, time\n"
    "child = subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(60)'])\n"
    "print('pid', os.getpid()); print('child', child.pid); time.sleep(60)"
)


class Run:
    """A running driver, its lines so far, and the pids its programs told."""

    def __init__(self, **programs: str) -> None:
        arguments = [f"{name}={code}" for name, code in programs.items()]
        self.process = subprocess.Popen(
            [sys.executable, "-c", DRIVER, *arguments],
            cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, start_new_session=True,
        )  # fmt: skip
        os.set_blocking(self.process.stdout.fileno(), False)
        self.lines: list[str] = []
        self.unread = b""

    def wait_for(self, *words: str, count: int = 1) -> list[str]:
        """The first `count` lines that hold all the words, waiting for them."""
        deadline = time.monotonic() + 20
        while len(found := [line for line in self.lines if all(word in line for word in words)]) < count:
            assert time.monotonic() < deadline, self.lines
            time.sleep(0.02)
            self._read()
        return found[:count]

    def _read(self) -> None:
        try:
            self.unread += os.read(self.process.stdout.fileno(), 1 << 20)
        except BlockingIOError:
            return
        *whole, self.unread = self.unread.split(b"\n")
        self.lines += [line.decode() for line in whole]

    def told_pid(self, name: str, word: str = "pid", nth: int = 1) -> int:
        return int(self.wait_for(f"{name}: {word} ", count=nth)[-1].split()[-1])

    def stop(self, number: int = signal.SIGTERM) -> int:
        self.process.send_signal(number)
        return self.process.wait(timeout=20)


@pytest.fixture
def run():
    runs: list[Run] = []

    def start(**programs: str) -> Run:
        runs.append(Run(**programs))
        return runs[-1]

    yield start
    for each in runs:
        if each.process.poll() is None:
            each.stop(signal.SIGINT)
        each.process.stdout.close()


def is_alive(pid: int) -> bool:
    """Whether the process runs; one that ended and waits to be collected does not."""
    state = subprocess.run(["ps", "-o", "stat=", "-p", str(pid)], capture_output=True, text=True).stdout.strip()
    return bool(state) and not state.startswith("Z")


def eventually(condition: Callable[[], bool]) -> bool:
    deadline = time.monotonic() + 10
    while not condition():
        if time.monotonic() > deadline:
            return False
        time.sleep(0.02)
    return True


# -- children ---------------------------------------------------------------------------------------------------


def test_a_child_that_ends_is_started_again_later_each_time_and_that_is_said(run):
    running = run(worker="print('hello'); raise SystemExit(3)", server=SLEEPER)
    lines = running.wait_for("The worker ended (exit code 3)", count=3)
    assert [line.split("again in ")[1] for line in lines] == ["0.1 s.", "0.2 s.", "0.2 s."]
    assert len(running.wait_for("worker: hello", count=3)) == 3
    assert len([line for line in running.lines if "server: pid" in line]) == 1


def test_a_killed_child_comes_back_and_what_it_had_started_does_not_stay(run):
    running = run(worker=FAMILY)
    first, its_child = running.told_pid("worker"), running.told_pid("worker", "child")
    os.kill(first, signal.SIGKILL)
    running.wait_for("The worker ended (by SIGKILL)")
    assert running.told_pid("worker", nth=2) != first
    assert eventually(lambda: not is_alive(its_child))


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGHUP])
def test_a_signal_ends_every_child_and_their_children(run, number):
    running = run(server=SLEEPER, worker=FAMILY, sweep=STUBBORN)
    pids = [running.told_pid("server"), running.told_pid("worker"), running.told_pid("worker", "child")]
    pids.append(running.told_pid("sweep"))
    assert running.stop(number) == 0
    assert eventually(lambda: not any(is_alive(pid) for pid in pids))


def test_a_second_ctrl_c_does_not_wait_for_a_child_that_takes_its_time(run):
    running = run(worker=STUBBORN)
    pid = running.told_pid("worker")
    running.process.send_signal(signal.SIGINT)
    running.wait_for("Stopping")
    started = time.monotonic()
    assert running.stop(signal.SIGINT) == 0
    assert time.monotonic() - started < 0.9
    assert not is_alive(pid)


def test_children_end_with_a_supervisor_that_was_killed(run):
    running = run(server=SLEEPER, worker=SLEEPER)
    pids = [running.told_pid("server"), running.told_pid("worker")]
    running.stop(signal.SIGKILL)
    if sys.platform.startswith("linux"):
        assert eventually(lambda: not any(is_alive(pid) for pid in pids))
    else:  # no other system ties a child to its parent's life; these are ours to end
        for pid in pids:
            os.kill(pid, signal.SIGKILL)


def test_a_worker_process_past_its_lease_is_ended_and_only_if_it_is_the_workers(run):
    running = run(worker=FAMILY)
    worker_child = running.told_pid("worker", "child")
    stranger = subprocess.Popen([sys.executable, "-c", "import time; time.sleep(60)"])
    try:
        both = run(
            worker=FAMILY,
            sweep="import sys, time\n"
            f"print('stale-worker {stranger.pid}'); print('stale-worker {worker_child}'); print('stale-worker 1')\n"
            "time.sleep(60)",
        )
        both.wait_for("left alone", count=3)
        assert is_alive(worker_child)
        assert stranger.poll() is None
    finally:
        stranger.kill()
        stranger.wait()


def test_the_workers_own_process_is_ended_when_its_lease_has_passed(run, tmp_path):
    told = tmp_path / "pid"
    worker = FAMILY.replace('time.sleep(60)"', "") + f"; open({str(told)!r}, 'w').write(str(child.pid)); child.wait()"
    worker = (
        "import subprocess, sys, time\n"
        "child = subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(60)'])\n"
        f"open({str(told)!r}, 'w').write(str(child.pid)); print('child gone', child.wait()); time.sleep(60)"
    )
    sweep = (
        "import os, time\n"
        f"while not (os.path.exists({str(told)!r}) and open({str(told)!r}).read()): time.sleep(0.02)\n"
        f"print('stale-worker', open({str(told)!r}).read()); time.sleep(60)"
    )
    running = run(worker=worker, sweep=sweep)
    running.wait_for("let its lease pass")
    running.wait_for("killed")
    running.wait_for("worker: child gone -9")


def test_output_is_named_by_child_and_odd_bytes_do_not_stop_it(run):
    running = run(
        worker="import sys; sys.stdout.buffer.write(b'\\xff\\n' + b'x' * 70000 + b'\\nlast'); sys.stdout.flush()\n"
        "import time; time.sleep(0.3)"
    )
    running.wait_for("worker: \ufffd")
    running.wait_for("worker: last")
