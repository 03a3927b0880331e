"""Verdicts on functional groups: conservative, explained, and never flipped by a worse measurement."""

import re
from pathlib import Path

import numpy as np
import pytest

from spectra.core import bands, preparation
from spectra.core.group_table import load
from spectra.core.groups import weigh_groups
from spectra.core.params import MethodParams
from spectra.core.results import GROUP_VERDICTS, Mask
from spectra.core.types import Conditions, Phase, Technique
from tests.numeric.synthetic import ACID, ALCOHOL, ALKANE, ESTER, axis, block, spectrum

PARAMS = MethodParams()
TABLE = load((Path(__file__).resolve().parents[2] / "fixtures" / "group_table" / "version_1.toml").read_text("utf-8"))
LIQUID = Conditions(phase=Phase.LIQUID, technique=Technique.TRANSMISSION)


def weighed(bands_or_xy, conditions=LIQUID, expected=None, forbidden=(), **options):
    x, y = spectrum(bands_or_xy, **options) if isinstance(bands_or_xy, list) else bands_or_xy
    prepared = preparation.prepare(block(x, y), conditions, PARAMS)
    found = bands.pick(prepared, PARAMS, conditions.phase)
    return weigh_groups(prepared, found, TABLE, conditions, PARAMS, expected=expected, forbidden=forbidden)


def verdicts(*args, **options):
    return {claim.group: claim.verdict for claim in weighed(*args, **options).claims}


def test_an_ester_is_seen_and_what_it_lacks_is_ruled_out():
    found = verdicts(ESTER)
    assert found["ester"] == "supported" and found["alkane_ch"] == "supported" and found["carbonyl"] == "supported"
    for absent in ("nitrile", "isocyanate", "azide", "nitro", "alcohol_oh", "carboxylic_acid", "amide"):
        assert found[absent] == "contradicted", absent


def test_an_alkane_has_no_carbonyl():
    found = verdicts(ALKANE)
    assert found["alkane_ch"] == "supported"
    assert found["carbonyl"] == "contradicted" and found["ester"] == "contradicted"
    assert "supported" not in {v for k, v in found.items() if k != "alkane_ch"}


def test_an_acid_needs_the_broad_hydroxyl_and_the_carbonyl():
    assert verdicts(ACID)["carboxylic_acid"] in ("supported", "undecided")
    without_hydroxyl = [b for b in ACID if b[0] not in (3000, 2650)]
    assert verdicts(without_hydroxyl)["carboxylic_acid"] != "supported"
    assert verdicts([b for b in ACID if b[0] != 1710])["carboxylic_acid"] != "supported"


def test_carbonyl_alone_decides_neither_aldehyde_nor_ketone():
    found = weighed(
        [(2960, 0.3, 30), (2930, 0.3, 25), (1718, 1.0, 22), (1460, 0.2, 20), (1365, 0.3, 15), (1170, 0.3, 25)]
    )
    claims = {claim.group: claim for claim in found.claims}
    assert claims["ketone"].verdict == "undecided"
    assert any("Tollens" in test for test in claims["ketone"].would_decide)
    assert claims["aldehyde"].verdict != "supported"
    assert claims["carbonyl"].verdict in ("supported", "undecided")


def test_an_alcohol_is_seen_through_hydroxyl_and_carbon_oxygen():
    assert verdicts(ALCOHOL)["alcohol_oh"] == "supported"
    assert verdicts([b for b in ALCOHOL if b[0] != 3330])["alcohol_oh"] != "supported"


def test_what_lies_outside_the_range_is_not_examined():
    found = verdicts(spectrum([b for b in ESTER if 1000 < b[0] < 2000], x=axis(900, 2000)))
    assert found["alkane_ch"] == "not_examined" and found["nitrile"] == "not_examined"


def test_peroxide_is_never_decided():
    claims = {claim.group: claim for claim in weighed(ESTER, expected=("peroxide",)).claims}
    assert claims["peroxide"].verdict == "undecided" and claims["peroxide"].hazard


def test_no_probability_is_printed_before_calibration():
    assert all(claim.probability is None for claim in weighed(ESTER).claims)


def test_every_claim_explains_itself():
    for claim in weighed(ESTER).claims:
        assert claim.verdict in GROUP_VERDICTS and claim.agrees in ("yes", "no", "neutral") and claim.weight
        if claim.verdict == "supported" and not claim.members:
            assert claim.for_ and all("cm-1" in sentence for sentence in claim.for_)
        if claim.verdict == "contradicted" and not claim.members:
            assert claim.against
        if claim.verdict in ("undecided", "not_examined"):
            assert claim.would_decide, claim.group


def test_agreement_follows_the_declaration():
    claims = {
        claim.group: claim for claim in weighed(ESTER, expected=("alkane_ch", "nitrile"), forbidden=("azide",)).claims
    }
    assert claims["alkane_ch"].agrees == "yes"
    assert claims["ester"].agrees == "no"
    assert claims["nitrile"].agrees == "no"
    assert claims["azide"].agrees == "yes"
    assert all(claim.agrees == "neutral" for claim in weighed(ESTER).claims)


def test_a_hazard_notice_comes_with_the_group():
    found = weighed([(2960, 0.3, 30), (2930, 0.3, 25), (2270, 1.0, 40), (1520, 0.3, 20), (1450, 0.2, 20)])
    claim = next(c for c in found.claims if c.group == "isocyanate")
    assert claim.verdict in ("supported", "undecided") and "safety data sheet" in claim.hazard
    assert next(c for c in weighed(ESTER).claims if c.group == "isocyanate").hazard is None


def test_an_unknown_phase_widens_the_windows_and_says_so():
    found = weighed(ESTER, conditions=Conditions())
    assert [f.code for f in found.findings] == ["groups.phase_unknown"]
    low, high = next((w.low_cm1, w.high_cm1) for lane in found.lanes if lane.group == "nitrile" for w in lane.windows)
    assert low <= 2202 and high >= 2310


def test_an_empty_spectrum_supports_nothing():
    x = axis()
    noise = np.random.default_rng(3).normal(0, 5e-4, len(x))
    assert "supported" not in verdicts((x, 0.05 + noise)).values()


@pytest.mark.parametrize("worse", ["noise", "slope", "shift", "resolution"])
def test_a_worse_measurement_never_flips_a_verdict(worse):
    for truth in (ESTER, ALKANE, ALCOHOL):
        before = verdicts(truth)
        x, y = spectrum(truth, noise=0.01 if worse == "noise" else 2e-4, slope=0.5 if worse == "slope" else 0.0)
        if worse == "shift":
            x = x + 2.0
        if worse == "resolution":
            y = preparation.gaussian_smooth(y, 1.0, 8.0)
        after = verdicts((x, y))
        assert not [g for g in before if {before[g], after[g]} == {"supported", "contradicted"}]


def test_lanes_show_windows_with_their_state():
    found = weighed(ESTER)
    lane = next(lane for lane in found.lanes if lane.group == "ester")
    assert lane.verdict == "supported" and {w.state for w in lane.windows} == {"found"}
    assert all(w.band_positions_cm1 for w in lane.windows)
    assert {w.state for lane in found.lanes for w in lane.windows} <= {"found", "missing", "not_readable"}


def sentences(found, group, row):
    claim = next(c for c in found.claims if c.group == group)
    return [s for s in (*claim.for_, *claim.against) if s.startswith(f"{row}:")]


def window_states(found, group):
    return {w.label: w.state for w in next(lane for lane in found.lanes if lane.group == group).windows}


def test_a_band_beside_a_window_counts_only_within_a_slack_that_is_said():
    ring = [(3060, 0.2, 15), (1600, 0.3, 12), (1495, 0.6, 12), (700, 1.0, 15)]
    inside = sentences(weighed([*ring, (1426, 0.2, 12)]), "aromatic", "ring stretch near 1450")
    assert len(inside) == 1 and "slack 6 cm-1" in inside[0]
    assert not sentences(weighed([*ring, (1422.9, 0.2, 12)]), "aromatic", "ring stretch near 1450")
    assert "slack" not in sentences(weighed([*ring, (1450, 0.2, 12)]), "aromatic", "ring stretch near 1450")[0]


def test_a_strong_band_is_never_evidence_for_a_weak_row():
    ring = [(3060, 0.2, 15), (1600, 0.3, 12), (1495, 0.6, 12), (700, 1.0, 15)]
    strong, weak = weighed([*ring, (1700, 0.9, 20)]), weighed([*ring, (1700, 0.05, 20)])
    assert not sentences(strong, "aromatic", "summation bands")
    assert window_states(strong, "aromatic")["summation bands"] == "not_readable"
    assert sentences(weak, "aromatic", "summation bands")


def test_strong_carbon_oxygen_bands_do_not_make_a_weak_alkyl_claim_strong():
    claim = next(
        c
        for c in weighed([(2930, 0.07, 30), (1450, 0.1, 20), (1250, 0.9, 30), (1050, 1.0, 30)]).claims
        if c.group == "alkane_ch"
    )
    assert claim.weight != "strong"
    assert not [s for s in claim.for_ if "1250" in s or "1050" in s]


def test_every_sentence_uses_the_word_of_the_band_table():
    words = {"vs": "very strong", "s": "strong", "m": "medium", "w": "weak", "vw": "very weak"}
    for conditions in (LIQUID, Conditions(phase=Phase.LIQUID, technique=Technique.ATR)):
        x, y = spectrum(ALCOHOL)
        prepared = preparation.prepare(block(x, y), conditions, PARAMS)
        table = {f"{b.position_cm1:.1f}": words[b.intensity] for b in bands.pick(prepared, PARAMS, Phase.LIQUID)}
        for claim in weighed(ALCOHOL, conditions=conditions).claims:
            for sentence in claim.for_:
                named = re.search(r"band at ([\d.]+) cm-1 \(([a-z ]+),", sentence)
                if named:
                    assert table[named[1]] == named[2], sentence


def test_a_depth_scaled_size_is_said_where_the_band_table_names_another():
    atr = Conditions(phase=Phase.LIQUID, technique=Technique.ATR)
    # Scaled to one depth, the hydroxyl at 3330 is the largest band, and C-O at 1050 falls to a medium one.
    found = weighed([(3330, 1.0, 250), (2970, 0.6, 25), (2930, 0.5, 25), (1050, 0.55, 35)], conditions=atr)
    said = [s for s in sentences(found, "alcohol_oh", "C-O stretch") if "weaker than usual" in s]
    assert said and "after depth scaling" in said[0]


def test_members_of_a_wider_class_that_are_ruled_out_do_not_speak_against_it():
    claim = next(c for c in weighed(ESTER).claims if c.group == "carbonyl")
    assert claim.verdict == "supported" and claim.against == ()
    assert "Members ruled out:" in claim.note and "amide" in claim.note


def test_a_region_that_a_moist_matrix_spoils_is_not_read_for_the_groups():
    x, y = spectrum([*ALCOHOL, (1635, 0.3, 60)])
    prepared = preparation.prepare(block(x, y), LIQUID, PARAMS)
    found = weigh_groups(
        prepared, bands.pick(prepared, PARAMS), TABLE, LIQUID, PARAMS, unreadable=(Mask(3100.0, 3700.0, "moist"),)
    )
    claim = next(c for c in found.claims if c.group == "alcohol_oh")
    assert claim.verdict in ("undecided", "not_examined")
    assert window_states(found, "alcohol_oh")["O-H stretch, hydrogen bonded"] == "not_readable"
    assert all(band.position_cm1 < 3100 for band in found.used_by)
