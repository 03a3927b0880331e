"""Approved master data, and a computation that takes no time where the numbers are not what is tested."""

from __future__ import annotations

import pytest


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
