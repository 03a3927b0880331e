"""The points a reviewer must see: what was overridden, what contradicts, what is missing around it."""

from __future__ import annotations

from dataclasses import replace

from reviews.points import MAX_TITLE_CHARACTERS, StatedClaim, Surroundings, must_see_points

CALM = StatedClaim(
    key="group:ester",
    kind="group",
    title="Ester",
    computed_verdict="supported",
    verdict="supported",
    agrees="yes",
    status="confirmed",
    text="C=O at 1742 cm⁻¹.",
    reason="",
    must_see=False,
    expected=True,
)


def points(*claims, conclusion="complies", text="", **around):
    return must_see_points(claims=claims, conclusion=conclusion, conclusion_text=text, around=Surroundings(**around))


def keys(*claims, **given):
    return [point.key for point in points(*claims, **given)]


def test_an_uneventful_lot_has_one_point():
    assert keys(CALM) == ["conclusion"]


def test_an_override_comes_first_and_wants_a_comment():
    changed = replace(CALM, status="changed", verdict="contradicted", agrees="no", reason="It is a lactone.")
    first = points(CALM, replace(changed, key="group:acid"))[0]
    assert first.key == "override:group:acid" and first.comment_required
    assert "It is a lactone." in first.detail and "Computed: supported" in first.detail


def test_an_added_claim_is_a_point():
    added = replace(CALM, key="added:impurity:water", kind="impurity", verdict="found", status="added", reason="1640")
    assert keys(added)[0] == "added:added:impurity:water"


def test_a_contradiction_is_a_point():
    assert keys(replace(CALM, verdict="contradicted", agrees="no"))[0] == "contradiction:group:ester"


def test_expected_groups_that_stay_undecided_share_one_point_where_the_test_complies():
    open_ones = [replace(CALM, key=f"group:{name}", title=name, verdict="undecided", agrees="neutral") for name in "ab"]
    found = points(*open_ones)
    assert [point.key for point in found] == ["undecided", "conclusion"]
    assert found[0].title == "2 expected groups undecided"
    assert keys(*open_ones, conclusion="inconclusive") == ["conclusion"]


def test_a_limited_measurement_is_a_point_and_hidden_contaminants_share_one():
    quality = replace(CALM, key="quality", kind="quality", verdict="limits_reading", agrees="neutral", must_see=True)
    hidden = [
        replace(
            CALM,
            key=f"impurity:{n}",
            title=n,
            kind="impurity",
            verdict="cannot_be_seen",
            agrees="neutral",
            must_see=True,
        )
        for n in ("water", "octane")
    ]
    found = points(quality, *hidden)
    assert [point.key for point in found] == ["unseen", "open:quality", "conclusion"]
    assert found[0].title == "Cannot be seen here: water, octane"


def test_a_hazard_is_a_point_whatever_its_verdict():
    assert "hazard:group:ester" in keys(replace(CALM, hazard="May explode."))


def test_what_lies_around_the_proposal_is_shown():
    found = keys(
        CALM,
        check="expired",
        reference="past its date",
        departures=("a", "b"),
        excluded=("x", "y"),
        reruns=("z",),
        earlier="rejected",
    )
    assert found == [
        "check",
        "reference",
        "departures",
        "excluded:1",
        "excluded:2",
        "rerun:1",
        "earlier",
        "conclusion",
    ]


def test_keys_are_there_once_and_titles_fit():
    claims = [
        replace(CALM, key=f"group:{n}", title="T" * 400, agrees="no", hazard="h" if n % 2 else "", must_see=True)
        for n in range(6)
    ]
    found = points(*claims)
    assert len({point.key for point in found}) == len(found)
    assert max(len(point.title) for point in found) == MAX_TITLE_CHARACTERS
