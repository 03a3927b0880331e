"""A spectrum is excluded, taken in again or made decisive: with a reason, in the trail, never out of sight."""

from __future__ import annotations

import pytest

from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible
from labsite.trail.models import TrailEntry
from spectra.models import Contribution, Spectrum
from spectra.services import uploads
from tests import builders


@pytest.fixture
def pair(cast, lab):
    row = builders.examination(cast, lab)
    first = builders.upload(row, cast.analyst).spectra.get()
    second = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    return first, second


def change(cast, spectrum, role, reason="a bubble in the film", by=None):
    return uploads.change_role(spectrum_id=spectrum.pk, by=by or cast.analyst, role=role, reason=reason)


def test_an_excluded_spectrum_stays_with_its_reason(cast, pair):
    change(cast, pair[1], "excluded")
    row = Spectrum.objects.get(pk=pair[1].pk)
    assert (row.role, row.role_before_exclusion, row.excluded_reason) == (
        "excluded",
        "replicate",
        "a bubble in the film",
    )
    assert Contribution.objects.filter(user=cast.analyst, kind="excluded").exists()
    entry = TrailEntry.objects.get(event="spectrum.excluded")
    assert entry.reason == "a bubble in the film"


def test_a_spectrum_taken_in_again_loses_the_reason_and_keeps_the_history(cast, pair):
    change(cast, pair[1], "excluded")
    change(cast, pair[1], "replicate", "no bubble after all")
    assert Spectrum.objects.get(pk=pair[1].pk).excluded_reason == ""
    assert TrailEntry.objects.filter(event__in=["spectrum.excluded", "spectrum.role_changed"]).count() == 2


def test_another_spectrum_made_decisive_replaces_the_first_and_is_analysed(cast, pair):
    change(cast, pair[1], "decisive", by=cast.second_analyst)
    assert [Spectrum.objects.get(pk=s.pk).role for s in pair] == ["replicate", "decisive"]
    assert [row.state for row in pair[1].analyses.all()] == ["queued", "queued"]  # as a replicate, and as decisive
    assert TrailEntry.objects.filter(event="spectrum.role_changed").count() == 2
    assert Contribution.objects.filter(user=cast.second_analyst, kind="changed_role").exists()


@pytest.mark.parametrize(
    ("role", "reason", "error", "code"),
    [
        ("excluded", "  ", BadInput, "spectrum.no_reason"),
        ("king", "why", BadInput, "spectrum.role"),
        ("replicate", "why", NotPossible, "spectrum.same_role"),
    ],
)
def test_a_change_without_sense_is_refused(cast, pair, role, reason, error, code):
    with pytest.raises(error) as refused:
        change(cast, pair[1], role, reason)
    assert refused.value.code == code


def test_only_an_analyst_changes_a_role(cast, pair):
    for person in (cast.reviewer, cast.qa_manager, cast.outsider):
        with pytest.raises(NotAllowed):
            change(cast, pair[1], "excluded", by=person)
    with pytest.raises(NotVisible):
        uploads.change_role(spectrum_id=0, by=cast.analyst, role="excluded", reason="why")


def test_evidence_stays_while_a_reviewer_has_it_and_after_the_decision(cast, lab, quick_computing):
    version = builders.submitted_version(cast, lab)
    row = version.interpretation.examination
    spectrum = row.spectra.get()
    for code, act in (
        ("examination.with_reviewer", lambda: change(cast, spectrum, "excluded")),
        ("examination.with_reviewer", lambda: builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=3))),
    ):
        with pytest.raises(NotPossible) as refused:
            act()
        assert refused.value.code == code
    rejected = builders.rejected_version(cast, lab, lot="L-2")
    with pytest.raises(NotPossible) as refused:
        change(cast, rejected.interpretation.examination.spectra.get(), "excluded")
    assert refused.value.code == "examination.decided"


def test_a_background_that_was_a_replicate_after_all_is_analysed(cast, lab):
    row = builders.examination(cast, lab)
    spectrum = builders.upload(row, cast.analyst, role="background").spectra.get()
    change(cast, spectrum, "replicate", "it was the sample")
    assert spectrum.analyses.count() == 1
    change(cast, spectrum, "excluded")
    change(cast, spectrum, "replicate", "no bubble after all")
    assert spectrum.analyses.count() == 1
