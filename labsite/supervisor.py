"""Keep child processes running: start them, start them again when they end, and end them all on a signal.

A child that ends is started again, later each time it fails soon. Each child leads a process group, so that what it
started ends with it, and only processes that this supervisor started are ever signalled.
"""

from __future__ import annotations

import ctypes
import os
import selectors
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

from labsite.bootstrap import ROOT, handled, say

BACK_OFF_SECONDS = (1, 2, 4, 8, 16, 30)
SETTLED_SECONDS = 60  # a child that lived this long counts as healthy again
GRACE_SECONDS = 10
STOP_SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


# -- children ---------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Program:
    """What to keep running. `on_line` sees each line that the program prints and says whether it dealt with it."""

    name: str
    command: tuple[str, ...]
    on_line: Callable[[str], bool] | None = None


@dataclass
class Child:
    program: Program
    process: subprocess.Popen | None = None
    started: float = 0.0
    failures: int = 0
    start_at: float = 0.0
    unread: bytes = field(default=b"", repr=False)

    @property
    def pid(self) -> int | None:
        return self.process.pid if self.process else None


class Supervisor:
    """Keeps programs running until it is told to stop. Call `run` from the main thread."""

    def __init__(
        self,
        programs: Sequence[Program],
        *,
        environment: Mapping[str, str],
        say: Callable[[str], None] = say,
        back_off: Sequence[float] = BACK_OFF_SECONDS,
        settled_seconds: float = SETTLED_SECONDS,
        grace_seconds: float = GRACE_SECONDS,
        parent_pid: int | None = None,
    ) -> None:
        self.children = {program.name: Child(program) for program in programs}
        self.environment = dict(environment)
        self.say = say
        self.back_off = tuple(back_off)
        self.settled_seconds = settled_seconds
        self.grace_seconds = grace_seconds
        self.parent_pid = parent_pid
        self.stop_requests = 0
        self._selector = selectors.DefaultSelector()

    def request_stop(self, number: int = 0, frame: object = None) -> None:
        """Signal handler: once ends the children in order, twice at once."""
        self.stop_requests += 1

    def run(self, each_turn: Callable[[], None] = lambda: None) -> int:
        """Start everything and look after it; `each_turn` is called a few times a second. Returns 0 when stopped."""
        with handled(STOP_SIGNALS, self.request_stop):
            try:
                while not self.stop_requests:
                    self._start_due()
                    self._listen(0.2)
                    self._notice_ends()
                    if self.parent_pid and os.getppid() != self.parent_pid:
                        self.say("The command that started this one is gone; stopping.")
                        break
                    each_turn()
            finally:
                self._end_all()
        return 0

    def kill_worker_process(self, pid: int, worker: str = "worker") -> bool:
        """End the worker process `pid` at once, if it is the named child or one of its descendants."""
        top = self.children[worker].pid
        if top is None or not is_descendant(pid, top):
            return False
        self.say(f"A worker process (pid {pid}) let its lease pass; ending it. Its analysis is taken up again.")
        try:
            os.kill(pid, signal.SIGKILL)
        except ProcessLookupError:
            return False
        return True

    # -- one turn

    def _start_due(self) -> None:
        for child in self.children.values():
            if child.process is None and time.monotonic() >= child.start_at:
                child.process = subprocess.Popen(
                    child.program.command, env=self.environment, cwd=ROOT, stdin=subprocess.DEVNULL,
                    stdout=subprocess.PIPE, stderr=subprocess.STDOUT, start_new_session=True,
                    preexec_fn=die_with_parent(),
                )  # fmt: skip
                child.started = time.monotonic()
                os.set_blocking(child.process.stdout.fileno(), False)
                self._selector.register(child.process.stdout, selectors.EVENT_READ, child)

    def _listen(self, seconds: float) -> None:
        if not self._selector.get_map():
            time.sleep(seconds)
            return
        for key, _ in self._selector.select(seconds):
            self._read(key.data)

    def _read(self, child: Child) -> bool:
        """Take what the child has printed; False when there is nothing more for now or for ever."""
        try:
            block = os.read(child.process.stdout.fileno(), 65536)
        except BlockingIOError:
            return False
        if not block:  # closed, by ending or on purpose
            self._unregister(child)
            return False
        *lines, child.unread = (child.unread + block).split(b"\n")
        if len(child.unread) > 65536:
            lines.append(child.unread)
            child.unread = b""
        for line in lines:
            self._pass_on(child, line)
        return True

    def _pass_on(self, child: Child, line: bytes) -> None:
        text = line.decode("utf-8", "replace").rstrip()
        if text and not (child.program.on_line and child.program.on_line(text)):
            self.say(f"{child.program.name}: {text}")

    def _unregister(self, child: Child) -> None:
        if child.process.stdout in self._selector.get_map():
            self._selector.unregister(child.process.stdout)

    def _notice_ends(self) -> None:
        for child in self.children.values():
            if child.process is None or not has_ended(child.process):
                continue
            lived = time.monotonic() - child.started
            code = self._reap(child)
            child.failures = 1 if lived >= self.settled_seconds else child.failures + 1
            wait = self.back_off[min(child.failures, len(self.back_off)) - 1]
            child.start_at = time.monotonic() + wait
            self.say(f"The {child.program.name} ended ({how_it_ended(code)}); starting it again in {wait:g} s.")

    def _reap(self, child: Child) -> int:
        """Collect an ended child: first what it left behind in its group, while its pid is still its own."""
        kill_group(child.process.pid)
        code = child.process.wait()
        while self._read(child):
            pass
        self._pass_on(child, child.unread)
        self._unregister(child)
        child.process.stdout.close()
        child.process, child.unread = None, b""
        return code

    # -- the end

    def _end_all(self) -> None:
        running = [child for child in self.children.values() if child.process is not None]
        if running:
            self.say("Stopping; a running analysis may take some seconds. Ctrl-C again does not wait for it.")
        for child in running:
            child.process.terminate()
        deadline = time.monotonic() + self.grace_seconds
        while any(not has_ended(child.process) for child in running):
            if time.monotonic() > deadline or self.stop_requests > 1:
                break
            self._listen(0.05)
        for child in running:
            self._reap(child)
        self._selector.close()


def how_it_ended(code: int) -> str:
    if code >= 0:
        return f"exit code {code}"
    try:
        return f"by {signal.Signals(-code).name}"
    except ValueError:
        return f"by signal {-code}"


# -- processes --------------------------------------------------------------------------------------------------


def has_ended(process: subprocess.Popen) -> bool:
    """Whether the child has ended, leaving it uncollected so that its pid and group cannot be anybody else's yet."""
    return os.waitid(os.P_PID, process.pid, os.WEXITED | os.WNOHANG | os.WNOWAIT) is not None


def kill_group(leader_pid: int) -> None:
    try:
        os.killpg(leader_pid, signal.SIGKILL)
    except (ProcessLookupError, PermissionError):  # macOS refuses for a group of ended processes
        pass


def die_with_parent() -> Callable[[], None] | None:
    """On Linux, a step in the new child that ties its life to ours, so that `kill -9` of us leaves nothing running."""
    if not sys.platform.startswith("linux"):
        return None
    set_parent_death_signal, prctl = 1, ctypes.CDLL(None, use_errno=True).prctl
    parent = os.getpid()

    def step() -> None:
        prctl(set_parent_death_signal, signal.SIGTERM, 0, 0, 0)
        if os.getppid() != parent:
            os._exit(1)

    return step


def parent_of(pid: int) -> int | None:
    try:
        with open(f"/proc/{pid}/stat", encoding="utf-8", errors="replace") as stat:
            # The name in parentheses may hold anything; what follows the last one is fixed: state, then parent.
            return int(stat.read().rpartition(")")[2].split()[1])
    except FileNotFoundError:
        if sys.platform.startswith("linux"):
            return None
    except (OSError, ValueError, IndexError):
        return None
    answer = subprocess.run(["ps", "-o", "ppid=", "-p", str(pid)], capture_output=True, text=True).stdout.strip()
    return int(answer) if answer.isdecimal() else None


def is_descendant(pid: int, ancestor: int) -> bool:
    """Whether `pid` is `ancestor` or was started by it, directly or through others."""
    seen = 0
    while pid and pid > 1 and seen < 20:
        if pid == ancestor:
            return True
        pid = parent_of(pid) or 0
        seen += 1
    return False
