"""The platform by itself: its tests make up records of the layers above it."""

from __future__ import annotations

import pytest

OWN = ("triggers", "accounts", "signatures")


@pytest.fixture(autouse=True)
def _verifiers_of_this_layer(monkeypatch):
    from labsite.trail import verify

    monkeypatch.setattr(verify, "_verifiers", {name: verify._verifiers[name] for name in OWN})
