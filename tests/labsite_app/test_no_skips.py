"""The CI plugin: a skipped test fails the run unless it is on the list, with a reason."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]

SUITE = """
import pytest

def test_that_runs():
    pass

@pytest.mark.skip(reason="no such service")
def test_that_is_skipped():
    pass
"""


def run_suite(folder: Path, allowed: str, module: str = "") -> subprocess.CompletedProcess:
    (folder / "test_sample.py").write_text(SUITE)
    if module:
        (folder / "test_module.py").write_text(module)
    (folder / "pytest.ini").write_text("[pytest]\n")
    environment = {**os.environ, "BANDLEDGER_ALLOWED_SKIPS": allowed, "PYTEST_ADDOPTS": "", "PYTHONPATH": str(ROOT)}
    command = [sys.executable, "-m", "pytest", "-p", "tests.no_skips", "-p", "no:django", "-p", "no:cacheprovider"]
    return subprocess.run(
        [*command, str(folder)], cwd=folder, env=environment, capture_output=True, text=True, timeout=60
    )


def test_a_skipped_test_fails_the_run_and_is_named_with_its_reason(tmp_path):
    done = run_suite(tmp_path, "")
    assert done.returncode == 1
    assert "test_sample.py::test_that_is_skipped: Skipped: no such service" in done.stdout


def test_a_skip_on_the_list_is_allowed(tmp_path):
    assert run_suite(tmp_path, "test_sample.py::test_that_is_skipped needs a service of its own").returncode == 0


def test_an_exception_without_a_reason_is_refused(tmp_path):
    done = run_suite(tmp_path, "test_sample.py::test_that_is_skipped")
    assert done.returncode == 4
    assert "gives no reason" in done.stderr + done.stdout


def test_a_module_that_skips_itself_fails_the_run_too(tmp_path):
    module = "import pytest\npytest.importorskip('no_such_package')\n"
    done = run_suite(tmp_path, "test_sample.py a reason", module)
    assert done.returncode == 1
    assert "test_module.py: Skipped: could not import" in done.stdout
