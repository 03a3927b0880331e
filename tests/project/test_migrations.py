"""The models and the migrations say the same."""

from __future__ import annotations

from io import StringIO

import pytest
from django.core.management import call_command

from labsite.trail.triggers import missing_triggers


@pytest.mark.django_db
def test_no_migration_is_missing():
    told = StringIO()
    try:
        call_command("makemigrations", check=True, dry_run=True, stdout=told)
    except SystemExit:
        pytest.fail(told.getvalue())


@pytest.mark.django_db
def test_migrating_puts_every_trigger_in_place():
    assert missing_triggers() == []
