"""One throw-away data folder for the whole run, and databases whose triggers survive the emptying between tests."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

# No test touches the folder of a real laboratory: neither here nor in a process that a test starts.
_VAR = Path(tempfile.mkdtemp(prefix="bandledger-tests-"))
os.environ["BANDLEDGER_VAR"] = str(_VAR)
os.environ.setdefault("BANDLEDGER_NO_VENV", "1")  # a command that a test runs uses this interpreter
os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labsite.settings")

import pytest  # noqa: E402
from django.conf import settings  # noqa: E402


def _move_folders() -> None:
    """Where the settings were read before this file (pytest's own configuration names them), move every path."""
    old = settings.VAR_DIR
    for name in dir(settings):
        value = getattr(settings, name) if name.isupper() else None
        if isinstance(value, Path) and value.is_relative_to(old):
            setattr(settings, name, _VAR / value.relative_to(old))
    settings.DATA_DIR.mkdir(parents=True, exist_ok=True)
    settings.STATIC_ROOT.mkdir(exist_ok=True)


_move_folders()
settings.PASSWORD_HASHERS = ["django.contrib.auth.hashers.MD5PasswordHasher"]  # the real one takes half a second
if settings.DATABASES["default"]["ENGINE"].endswith("sqlite3"):
    # A file, not memory: several connections to one memory database lock whole tables and know no write-ahead log.
    settings.DATABASES["default"].setdefault("TEST", {})["NAME"] = str(_VAR / "test.sqlite3")


def pytest_unconfigure() -> None:
    shutil.rmtree(_VAR, ignore_errors=True)


@pytest.fixture(scope="session", autouse=True)
def _flush_lifts_triggers() -> Iterator[None]:
    """Transactional tests end by emptying all tables, which the triggers refuse."""
    from django.test import TransactionTestCase

    from tests.lifting import lifted_triggers

    tear_down = TransactionTestCase._fixture_teardown

    def lifted_tear_down(test_case: TransactionTestCase) -> None:
        with lifted_triggers():
            tear_down(test_case)

    # TestCase has its own, which rolls back and needs no lifting.
    TransactionTestCase._fixture_teardown = lifted_tear_down
    yield
    TransactionTestCase._fixture_teardown = tear_down


@pytest.fixture
def cast(db: None):
    """The fixed cast, one person for each role."""
    from tests.cast import make_cast

    return make_cast()


@pytest.fixture
def as_person() -> Callable:
    """`as_person(cast.analyst)` is a client whose session belongs to that person."""
    from tests.cast import signed_in

    return signed_in


# Approved master data, and a computation that takes no time where the numbers are not what is tested.


@pytest.fixture
def lab(cast):
    from tests.builders import laboratory

    return laboratory(cast)


@pytest.fixture
def quick_computing(monkeypatch):
    """Every analysis ends at once with `builders.RESULT`, or with what the test sets on the returned object."""
    from spectra import computing
    from tests.builders import fake_outcome

    class Quick:
        outcome = fake_outcome()
        calls = 0

    def compute(analysis, *, progress=None):
        Quick.calls += 1
        return Quick.outcome

    monkeypatch.setattr(computing, "compute", compute)
    return Quick


@pytest.fixture
def rung(monkeypatch):
    """The ids that were rung for, in order; nobody answers."""
    from spectra import queue

    ids: list[int] = []
    monkeypatch.setattr(queue, "ring", ids.append)
    return ids
