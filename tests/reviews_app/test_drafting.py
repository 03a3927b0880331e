"""Draft claims from an analysis: pure, complete, in the order in which they need thought."""

from __future__ import annotations

import copy

import pytest

from reviews.drafting import MAX_UNEXPLAINED, draft_claims
from reviews.words import VERDICTS, agrees_after, verdict_words
from tests.builders import RESULT


def result(**parts):
    return {**copy.deepcopy(dict(RESULT)), **parts}


def by_key(document):
    return {claim.key: claim for claim in draft_claims(document)}


def test_a_clean_measurement_is_said_to_be_usable():
    claim = by_key(result())["quality"]
    assert (claim.verdict, claim.agrees, claim.must_see) == ("usable", "yes", False)


@pytest.mark.parametrize(
    ("severity", "verdict", "agrees", "must_see"),
    [
        ("info", "usable", "yes", False),
        ("warning", "limits_reading", "neutral", True),
        ("serious", "not_usable", "no", True),
    ],
)
def test_findings_of_the_measurement_limit_the_reading(severity, verdict, agrees, must_see):
    finding = {"code": "m.x", "severity": severity, "message": "Vapour lines.", "remedy": "Purge."}
    claim = by_key(result(findings=[finding]))["quality"]
    assert (claim.verdict, claim.agrees, claim.must_see) == (verdict, agrees, must_see)
    if severity != "info":
        assert claim.text == "Vapour lines." and claim.evidence["would_decide"] == ["Purge."]


def test_without_a_reference_identity_cannot_be_compared():
    for missing in (None, {}):
        claim = by_key(result(identity=missing))["identity"]
        assert (claim.verdict, claim.agrees, claim.must_see) == ("cannot_be_compared", "neutral", True)
        assert claim.evidence["would_decide"]


def test_identity_carries_what_was_computed():
    claim = by_key(result())["identity"]
    assert (claim.verdict, claim.must_see) == ("consistent", False)
    assert claim.text == "5 of 5 bands of the reference are present."
    assert claim.evidence["bands_compared"] == 5


def test_groups_that_nobody_speaks_of_stay_in_their_lane():
    keys = set(by_key(result()))
    assert {"group:ester", "group:alkane_ch", "group:alcohol"} <= keys
    assert "group:amine" not in keys


def test_an_unexpected_group_that_is_supported_is_claimed():
    groups = [{"group": "amine", "verdict": "supported", "agrees": "no", "for": ["N-H at 3300 cm⁻¹"], "against": []}]
    claim = by_key(result(groups=groups))["group:amine"]
    assert claim.must_see and claim.title == "amine" and not claim.evidence["expected"]


def test_a_hazardous_group_is_always_shown():
    groups = [
        {
            "group": "azide",
            "verdict": "undecided",
            "agrees": "neutral",
            "for": [],
            "against": [],
            "hazard": "May explode.",
        }
    ]
    claim = by_key(result(groups=groups))["group:azide"]
    assert claim.must_see and claim.evidence["hazard"] == "May explode."


def test_what_speaks_against_the_declaration_comes_first():
    groups = [
        {"group": name, "label": name, "verdict": "supported", "agrees": agrees, "for": [], "against": []}
        for name, agrees in (("b", "yes"), ("ester", "yes"), ("a", "no"), ("c", "neutral"))
    ]
    order = [claim.subject for claim in draft_claims(result(groups=groups)) if claim.kind == "group"]
    assert order == ["a", "c", "ester", "b"]


def impurities(*screened, unexplained=()):
    return result(impurities={"screened": list(screened), "unexplained": list(unexplained)})


def test_a_contaminant_that_was_found_says_how_much_and_how_little_would_be_seen():
    item = {
        "name": "acetic acid",
        "verdict": "found",
        "agrees": "no",
        "estimate_fraction": 0.031,
        "standard_uncertainty": 0.004,
        "detection_limit_fraction": 0.006,
        "scale": "share of peak height",
    }
    claim = by_key(impurities(item))["impurity:acetic acid"]
    assert claim.text == (
        "3.1 % ± 0.4 % (standard uncertainty), share of peak height; detection limit in this spectrum 0.6 %."
    )
    assert claim.must_see and claim.agrees == "no"


def test_a_contaminant_that_was_not_found_carries_its_detection_limit():
    item = {"name": "water", "verdict": "not_found_above_limit", "agrees": "yes", "detection_limit_fraction": 0.004}
    claim = by_key(impurities(item))["impurity:water"]
    assert claim.text == "Not found above 0.4 % in this spectrum (fraction of peak height)."
    assert not claim.must_see


def test_a_contaminant_that_cannot_be_seen_is_never_called_absent():
    item = {"name": "octane", "verdict": "cannot_be_seen", "agrees": "neutral", "detection_limit_fraction": None}
    claim = by_key(impurities(item))["impurity:octane"]
    assert claim.must_see and claim.text == "It cannot be seen in this spectrum."


def test_the_strongest_unexplained_bands_are_claimed_once_each():
    bands = [{"position_cm1": 900.0 + n / 4, "height_absorbance": 0.01, "snr": 10.0 + n} for n in range(12)]
    claims = [c for c in draft_claims(impurities(unexplained=bands)) if c.kind == "unexplained"]
    assert len(claims) == len({claim.key for claim in claims}) == MAX_UNEXPLAINED
    assert {claim.evidence["snr"] for claim in claims} == {16.0, 17.0, 18.0, 19.0, 20.0, 21.0}
    assert all(claim.must_see and claim.verdict == "open" for claim in claims)


def test_drafting_is_pure_and_repeats_itself():
    document = result()
    before = copy.deepcopy(document)
    assert draft_claims(document) == draft_claims(document)
    assert document == before


def test_an_empty_result_still_gives_quality_and_identity():
    assert set(by_key({})) == {"quality", "identity"}


def test_every_verdict_has_words_and_agreement():
    for kind, verdicts in VERDICTS.items():
        for verdict in verdicts:
            assert "_" not in verdict_words(kind, verdict)
            for expected in (True, False, None):
                assert agrees_after(kind, verdict, expected=expected) in ("yes", "no", "neutral")


@pytest.mark.parametrize(
    ("verdict", "expected", "agrees"),
    [
        ("supported", True, "yes"),
        ("supported", False, "no"),
        ("contradicted", True, "no"),
        ("contradicted", False, "yes"),
        ("supported", None, "neutral"),
        ("undecided", True, "neutral"),
    ],
)
def test_a_group_agrees_as_the_declaration_says(verdict, expected, agrees):
    assert agrees_after("group", verdict, expected=expected) == agrees
