"""The analyst confirms, changes, adds and takes back claims; everything leaves its trace."""

from __future__ import annotations

import json

import pytest

from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible, Stale
from labsite.trail.models import TrailEntry
from reviews.models import Claim
from reviews.services import drafts
from spectra.models import Contribution
from spectra.services import analyses, uploads
from tests import builders


@pytest.fixture
def version(cast, lab, quick_computing):
    return builders.drafted_version(cast, lab)


def claim(version, key) -> Claim:
    return version.claims.get(key=key)


def confirm(version, key, by):
    return drafts.confirm_claim(version_id=version.pk, claim_id=claim(version, key).pk, by=by)


def change(version, key, by, verdict="contradicted", reason="the band is water", edits=None):
    return drafts.change_claim(
        version_id=version.pk, claim_id=claim(version, key).pk, by=by, verdict=verdict, reason=reason, edits=edits
    )


def add(version, by, **values):
    fields = {"kind": "impurity", "title": "Water", "verdict": "found", "reason": "1640 cm⁻¹"} | values
    return drafts.add_claim(version_id=version.pk, by=by, **fields)


def content_of(event: str) -> dict:
    return json.loads(bytes(TrailEntry.objects.filter(event=event).order_by("-seq").first().canonical))


def test_an_analysis_drafts_the_first_version(version):
    assert (version.number, version.state, version.conclusion) == (1, "draft", "")
    keys = set(version.claims.values_list("key", flat=True))
    assert keys == {"quality", "identity", "group:ester", "group:alkane_ch", "group:alcohol"}
    assert set(version.claims.values_list("status", flat=True)) == {"proposed"}
    assert TrailEntry.objects.filter(event="claim.drafted").count() == 1


def test_a_confirmed_claim_is_the_analysts_own(version, cast):
    row = confirm(version, "identity", cast.analyst)
    assert (row.status, row.stated_by, row.verdict) == ("confirmed", cast.analyst, "consistent")
    assert Contribution.objects.filter(user=cast.analyst, kind="claimed").exists()
    version.refresh_from_db()
    assert version.edits == 1 and version.opened_by == cast.analyst


def test_a_changed_claim_keeps_what_was_computed_beside_it(version, cast):
    row = change(version, "group:ester", cast.analyst)
    assert (row.status, row.verdict, row.agrees) == ("changed", "contradicted", "no")
    assert (row.computed_verdict, row.reason) == ("supported", "the band is water")
    entry = content_of("claim.changed")
    assert entry["old"]["verdict"] == "supported" and entry["new"]["verdict"] == "contradicted"
    assert entry["reason"] == "the band is water"


def test_confirming_after_a_change_returns_to_what_was_computed(version, cast):
    change(version, "group:ester", cast.analyst)
    row = confirm(version, "group:ester", cast.analyst)
    assert (row.status, row.verdict, row.agrees, row.reason) == ("confirmed", "supported", "yes", "")


@pytest.mark.parametrize(
    ("values", "code"),
    [
        ({"reason": "  "}, "claim.no_reason"),
        ({"verdict": "perhaps"}, "claim.verdict"),
        ({"verdict": "found"}, "claim.verdict"),
        ({"verdict": "supported"}, "claim.same_verdict"),
    ],
)
def test_a_change_without_sense_is_refused(version, cast, values, code):
    with pytest.raises(BadInput) as refused:
        change(version, "group:ester", cast.analyst, **values)
    assert refused.value.code == code
    assert claim(version, "group:ester").status == "proposed"


def test_a_change_on_a_page_that_is_out_of_date_is_refused(version, cast):
    confirm(version, "identity", cast.second_analyst)
    with pytest.raises(Stale):
        change(version, "group:ester", cast.analyst, edits=0)
    assert change(version, "group:ester", cast.analyst, edits=1).status == "changed"


def test_all_that_is_as_declared_is_confirmed_at_once(version, cast):
    assert drafts.confirm_uneventful(version_id=version.pk, by=cast.analyst) == 4
    assert list(version.claims.filter(status="proposed").values_list("key", flat=True)) == ["group:alkane_ch"]
    with pytest.raises(NotPossible):
        drafts.confirm_uneventful(version_id=version.pk, by=cast.analyst)


def test_a_claim_is_added_changed_and_taken_back(version, cast):
    row = add(version, cast.analyst)
    assert (row.key, row.status, row.agrees, row.must_see) == ("added:impurity:water", "added", "no", True)
    with pytest.raises(NotPossible):
        confirm(version, row.key, cast.analyst)
    changed = change(version, row.key, cast.analyst, verdict="cannot_be_seen", reason="hidden after all")
    assert changed.status == "added"
    drafts.remove_claim(version_id=version.pk, claim_id=row.pk, by=cast.analyst, reason="typing error")
    assert not version.claims.filter(pk=row.pk).exists()
    assert content_of("claim.removed")["old"]["verdict"] == "cannot_be_seen"


@pytest.mark.parametrize(
    ("values", "code"),
    [
        ({"kind": "identity", "verdict": "consistent"}, "claim.kind"),
        ({"verdict": "supported"}, "claim.verdict"),
        ({"title": " "}, "claim.no_title"),
        ({"reason": ""}, "claim.no_reason"),
    ],
)
def test_an_added_claim_without_sense_is_refused(version, cast, values, code):
    with pytest.raises(BadInput) as refused:
        add(version, cast.analyst, **values)
    assert refused.value.code == code


def test_the_same_claim_is_added_once_and_other_scripts_are_told_apart(version, cast):
    add(version, cast.analyst)
    with pytest.raises(BadInput) as refused:
        add(version, cast.analyst, title=" WATER! ")
    assert refused.value.code == "claim.there_already"
    assert add(version, cast.analyst, title="вода").key != add(version, cast.analyst, title="спирт").key


def test_a_computed_claim_is_never_taken_back(version, cast):
    with pytest.raises(NotPossible) as refused:
        drafts.remove_claim(
            version_id=version.pk, claim_id=claim(version, "identity").pk, by=cast.analyst, reason="unwanted"
        )
    assert refused.value.code == "claim.computed"


def test_taking_back_needs_a_reason(version, cast):
    row = add(version, cast.analyst)
    with pytest.raises(BadInput):
        drafts.remove_claim(version_id=version.pk, claim_id=row.pk, by=cast.analyst, reason=" ")
    assert version.claims.filter(pk=row.pk).exists()


def test_a_claim_is_reached_only_through_its_own_version(version, cast, lab):
    other = builders.drafted_version(cast, lab, lot="L-2")
    with pytest.raises(NotVisible):
        drafts.confirm_claim(version_id=version.pk, claim_id=other.claims.first().pk, by=cast.analyst)
    with pytest.raises(NotVisible):
        drafts.confirm_claim(version_id=0, claim_id=other.claims.first().pk, by=cast.analyst)


def test_only_an_analyst_states_claims(version, cast):
    for person in (cast.reviewer, cast.qa_manager, cast.method_owner, cast.administrator, cast.outsider):
        for act in (
            lambda p: confirm(version, "identity", p),
            lambda p: change(version, "group:ester", p),
            lambda p: add(version, p),
            lambda p: drafts.confirm_uneventful(version_id=version.pk, by=p),
        ):
            with pytest.raises(NotAllowed):
                act(person)
    assert not version.claims.exclude(status="proposed").exists()


def test_a_new_analysis_takes_the_place_of_the_claims_and_the_trail_keeps_them(version, cast):
    change(version, "group:ester", cast.analyst)
    builders.conclude(version, cast.analyst)
    row = version.interpretation.examination
    second = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    uploads.change_role(spectrum_id=second.pk, by=cast.analyst, role="decisive", reason="the first film was torn")
    newest = second.analyses.order_by("-pk").first()
    assert analyses.execute(analysis_id=newest.pk)
    version.refresh_from_db()
    assert (version.number, version.analysis, version.conclusion) == (1, newest, "")
    assert set(version.claims.values_list("status", flat=True)) == {"proposed"}
    old = content_of("claim.removed")["old"]
    assert old["claims"]["group:ester"] == {
        "verdict": "contradicted",
        "status": "changed",
        "reason": "the band is water",
    }
    assert old["conclusion"] == "complies"


def test_the_longest_names_fit_every_column(cast, lab, quick_computing):
    item = {"name": "n" * 120, "verdict": "found", "agrees": "no", "estimate_fraction": 0.1, "for": [], "against": []}
    quick_computing.outcome = builders.fake_outcome(
        {**builders.RESULT, "impurities": {"screened": [item], "unexplained": []}}
    )
    version = builders.drafted_version(cast, lab)
    assert claim(version, "impurity:" + "n" * 120)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    assert builders.submit(version, cast.analyst).points.filter(key="contradiction:impurity:" + "n" * 120).exists()
