"""Instruments, their checks and people's competence are recorded by those who may."""

from __future__ import annotations

from datetime import date, timedelta

import pytest
from django.utils import timezone

from labsite.errors import BadInput, NotAllowed, NotVisible
from spectra import selectors, store
from spectra.models import Instrument
from spectra.services import instruments


def check(cast, lab, **values):
    now = timezone.now()
    fields = {
        "by": cast.analyst,
        "accessory_id": lab.instrument.accessories.get().pk,
        "performed_at": now,
        "valid_until": now + timedelta(days=1),
        "verdict": "passed",
    } | values
    return instruments.record_check(**fields)


def test_the_last_check_counts_whatever_it_says(cast, lab):
    accessory = lab.instrument.accessories.get()
    failed = check(cast, lab, verdict="failed", note="film torn", data=b"polystyrene")
    assert store.get(failed.raw_file.sha256) == b"polystyrene"
    now = timezone.now()
    assert selectors.check_in_force(accessory, at=now) == failed
    assert not selectors.check_is_valid(failed, at=now)
    passed = check(cast, lab)
    assert selectors.check_is_valid(passed, at=timezone.now())
    assert not selectors.check_is_valid(passed, at=timezone.now() + timedelta(days=2))
    assert selectors.check_in_force(None, at=now) is None


def test_a_check_without_sense_is_refused(cast, lab):
    now = timezone.now()
    for values, code in (
        ({"verdict": "fine"}, "check.verdict"),
        ({"performed_at": now + timedelta(hours=1)}, "check.later"),
        ({"valid_until": now - timedelta(days=9)}, "check.valid_until"),
    ):
        with pytest.raises(BadInput) as refused:
            check(cast, lab, **values)
        assert refused.value.code == code
    with pytest.raises(NotVisible):
        check(cast, lab, accessory_id=0)
    with pytest.raises(NotAllowed):
        check(cast, lab, by=cast.reviewer)


def test_an_instrument_code_is_taken_once(cast, lab):
    with pytest.raises(BadInput):
        instruments.register_instrument(by=cast.method_owner, code="FT-1", name="another")
    with pytest.raises(NotAllowed):
        instruments.register_instrument(by=cast.analyst, code="FT-2", name="another")
    assert Instrument.objects.count() == 1


def test_qualification_and_competence_are_recorded(cast, lab):
    instruments.record_qualification(
        by=cast.method_owner,
        instrument_id=lab.instrument.pk,
        performed_on=date(2026, 1, 5),
        due_on=date(2027, 1, 5),
        occasion="yearly",
    )
    row = instruments.record_competence(
        by=cast.qa_manager,
        user_id=cast.analyst.pk,
        activity="analyse",
        valid_until=date(2027, 1, 1),
        evidence="training record 7",
    )
    assert row.user == cast.analyst
    with pytest.raises(BadInput):
        instruments.record_competence(
            by=cast.qa_manager, user_id=cast.analyst.pk, activity="dance", valid_until=date(2027, 1, 1), evidence="x"
        )
