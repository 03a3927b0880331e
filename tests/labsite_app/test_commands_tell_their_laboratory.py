"""A command says which laboratory it worked on, and refuses in one line where there is none."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest
from django.conf import settings
from django.core.management import CommandError, call_command
from django.db import OperationalError, connection

from labsite import bootstrap

ROOT = Path(__file__).resolve().parents[2]


def run(folder: Path, *arguments: str) -> subprocess.CompletedProcess:
    kept = {name: value for name, value in os.environ.items() if not name.startswith(("BANDLEDGER_", "DATABASE_URL"))}
    environment = kept | {"BANDLEDGER_VAR": str(folder), "BANDLEDGER_NO_VENV": "1"}
    return subprocess.run(
        [sys.executable, str(ROOT / "manage.py"), *arguments], env=environment, cwd=ROOT, stdin=subprocess.DEVNULL,
        capture_output=True, text=True, timeout=120,
    )  # fmt: skip


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("verify_trail",), ("no laboratory at", "own/bandledger.sqlite3", "start --own", "verify_trail --demo")),
        (("verify_trail", "--demo"), ("no demonstration laboratory at", "demo/bandledger.sqlite3", "manage.py start")),
        (("load_method", "--by", "owner"), ("no laboratory at", "start --own")),
    ],
)
def test_a_command_without_a_laboratory_is_refused_in_one_line(tmp_path, arguments, words):
    done = run(tmp_path, *arguments)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr and done.stdout == ""
    (line,) = done.stderr.strip().splitlines()
    for word in words:
        assert word in line


def test_the_verification_of_the_demonstration_names_it_and_its_database(tmp_path):
    assert run(tmp_path, "migrate", "--demo", "--verbosity", "0").returncode == 0
    done = run(tmp_path, "verify_trail", "--demo")
    assert done.returncode == 0, done.stderr
    first = done.stdout.splitlines()[0]
    assert "the demonstration" in first and str(tmp_path / "demo" / "bandledger.sqlite3") in first
    assert "The trail is whole: 0 entries" in done.stdout
    assert run(tmp_path, "verify_trail").returncode == 2  # one's own is still not there


def test_a_database_of_an_older_version_is_named_as_such(db, monkeypatch):
    from django.db.migrations.executor import MigrationExecutor

    monkeypatch.setattr(MigrationExecutor, "migration_plan", lambda self, targets: ["one that waits"])
    text = bootstrap.database_refusal(OperationalError("no such column"), "verify_trail")
    assert "older version" in text and "manage.py migrate" in text


def test_other_errors_are_not_hidden(db):
    assert bootstrap.database_refusal(ValueError("ours"), "verify_trail") is None
    assert bootstrap.database_refusal(OperationalError("disk full"), "verify_trail") is None


def test_the_verification_names_the_laboratory(db, capsys):
    call_command("verify_trail")
    first = capsys.readouterr().out.splitlines()[0]
    assert settings.LABORATORY_NAME in first and str(connection.settings_dict["NAME"]) in first


def test_the_demonstration_is_never_silently_exchanged_for_ones_own(db):
    with pytest.raises(CommandError, match="BANDLEDGER_DEMO=1"):
        call_command("verify_trail", demo=True)
