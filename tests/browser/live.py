"""A laboratory that runs: `manage.py start --own` with its web server, worker and sweep, in a temporary folder."""

from __future__ import annotations

import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import time
import urllib.request
from collections.abc import Callable
from pathlib import Path

from labsite.supervisor import die_with_parent

ROOT = Path(__file__).resolve().parent.parent.parent
READY_S = 60
STOP_S = 20


class LiveLaboratory:
    """Starts by `start()`, ends by `stop()`. Only processes that it started are ended, each by its own id."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.port = free_port()
        self.address = f"http://127.0.0.1:{self.port}"
        # Nothing of the caller's shell decides which database or which folder this laboratory uses.
        outer = {k: v for k, v in os.environ.items() if not k.startswith("BANDLEDGER_")}
        for name in ("DATABASE_URL", "BROKER_URL", "DJANGO_SETTINGS_MODULE"):
            outer.pop(name, None)
        cache = {k: v for k, v in os.environ.items() if k == "BANDLEDGER_TEST_CACHE"}
        self.environment = {**outer, **cache, "BANDLEDGER_VAR": str(folder), "BANDLEDGER_NO_VENV": "1"}
        self.ids: dict[str, int] = {}
        self.process: subprocess.Popen | None = None

    def start(self) -> None:
        self.ids = json.loads(self.run("-m", "tests.browser.prepare").stdout)
        self.log = open(self.folder / "start.log", "wb")  # noqa: SIM115 - closed by stop()
        self.process = subprocess.Popen(
            [sys.executable, str(ROOT / "manage.py"), "start", "--own", "--port", str(self.port)],
            cwd=ROOT,
            env=self.environment,
            stdin=subprocess.DEVNULL,
            stdout=self.log,
            stderr=subprocess.STDOUT,
            preexec_fn=die_with_parent(),
        )
        try:
            wait_until(self._answers, READY_S, "the web server answers")
        except AssertionError as error:
            self.stop()
            raise AssertionError(f"{error}\n{self.said()}") from None

    def stop(self) -> None:
        if self.process is None:
            return
        self.process.send_signal(signal.SIGTERM)
        try:
            self.process.wait(STOP_S)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()
        self.process = None
        self.log.close()

    def said(self) -> str:
        return (self.folder / "start.log").read_text(encoding="utf-8", errors="replace")

    def _answers(self) -> bool:
        if self.process is not None and self.process.poll() is not None:
            raise AssertionError("the command ended")
        try:
            with urllib.request.urlopen(f"{self.address}/health/", timeout=2) as answer:
                return answer.status == 200
        except OSError:
            return False

    def run(self, *arguments: str, check: bool = True) -> subprocess.CompletedProcess:
        """A Python process in this laboratory, to its end."""
        done = subprocess.run(
            [sys.executable, *arguments], cwd=ROOT, env=self.environment, text=True, capture_output=True, timeout=120
        )
        assert not check or done.returncode == 0, done.stdout + done.stderr
        return done

    def manage(self, *arguments: str) -> subprocess.CompletedProcess:
        return self.run(str(ROOT / "manage.py"), *arguments, check=False)

    def rows(self, query: str, *values: object) -> list[tuple]:
        """Read the database from outside, as it stands on the disk."""
        database = sqlite3.connect(f"file:{self.folder / 'own' / 'bandledger.sqlite3'}?mode=ro", uri=True, timeout=10)
        try:
            return database.execute(query, values).fetchall()
        finally:
            database.close()

    def stored_file(self, sha256: str) -> Path:
        return self.folder / "own" / "files" / sha256[:2] / sha256


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def wait_until(happened: Callable[[], object], seconds: float, what: str, *, every: float = 0.1) -> object:
    """Wait for `happened` to answer with something true, and give that back."""
    deadline = time.monotonic() + seconds
    while True:
        found = happened()
        if found:
            return found
        assert time.monotonic() < deadline, f"after {seconds:g} s still not: {what}"
        time.sleep(every)
