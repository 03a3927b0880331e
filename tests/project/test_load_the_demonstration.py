"""The demonstration loads through the services, once, whole, and again after an interruption."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import pytest

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))


@pytest.fixture
def manage(tmp_path):
    environment = {
        name: value
        for name, value in os.environ.items()
        if not name.startswith(("BANDLEDGER_", "DATABASE_URL", "BROKER_URL", "PYTEST"))
    } | {"BANDLEDGER_DEMO": "1", "BANDLEDGER_VAR": str(tmp_path), "BANDLEDGER_NO_VENV": "1", "OMP_NUM_THREADS": "1"}

    def start(*arguments: str) -> subprocess.Popen:
        return subprocess.Popen(
            [sys.executable, "manage.py", *arguments],
            cwd=ROOT,
            env=environment,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )

    def run(*arguments: str) -> tuple[int, str]:
        process = start(*arguments)
        output, _ = process.communicate(timeout=240)
        return process.returncode, output

    run.start = start
    return run


def test_an_interrupted_loading_begins_anew_and_ends_whole(manage):
    assert manage("migrate", "--verbosity", "0")[0] == 0
    loading = manage.start("load_demo")
    for line in loading.stdout:
        if "story 2" in line:
            break
    loading.send_signal(signal.SIGKILL)
    loading.wait()
    loading.stdout.close()
    time.sleep(0.1)
    code, output = manage("load_demo")
    assert code == 0 and "beginning anew" in output and "is loaded" in output, output
    code, output = manage("verify_trail")
    assert code == 0 and "whole" in output, output
    assert manage("load_demo") == (0, "")
    assert "password for each" in manage("load_demo", "--accounts")[1]
