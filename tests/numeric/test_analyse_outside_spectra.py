"""The analysis on measured spectra with known truth (sources: tests/bench/analysis_cases.py)."""

import numpy as np
import pytest

from spectra.core import bands, identity, impurities, preparation
from spectra.core.groups import weigh_groups
from spectra.core.params import MethodParams
from spectra.core.types import Conditions, Phase
from tests.bench import analysis_cases
from tests.bench.bench_analysis import figures, group_tally

PARAMS = MethodParams()
FILM = Conditions(phase=Phase.FILM)
# Band positions of a polystyrene film in cm-1 (NIST SRM 1921, from memory).
POLYSTYRENE_CM1 = (
    3082.2,
    3060.0,
    3026.4,
    3001.4,
    2850.1,
    1942.8,
    1601.35,
    1583.1,
    1154.6,
    1069.2,
    1028.35,
    906.8,
    842.0,
    540.0,
)
NOT_SEPARABLE_CM1 = {1154.6, 1069.2, 842.0, 540.0}  # polycarbonate lies beside them in the mixed film
# Bands of bisphenol-A polycarbonate in cm-1 (common knowledge of the trade).
POLYCARBONATE_CM1 = (1775, 1505, 1228, 1193, 1163, 1080, 1015, 831)


@pytest.fixture(scope="module")
def by_name():
    return {case.name: case for case in analysis_cases.cases()}


@pytest.fixture(scope="module")
def tally():
    return group_tally(list(analysis_cases.cases()))


def test_group_verdicts_are_right_when_they_are_given(tally):
    total, _, _, errors = tally
    found = figures(total, "group")
    assert found["wrong"] <= 0.01, errors
    assert found["precision"] >= 0.95, errors
    assert found["decided"] >= 0.79
    assert found["positives_decided"] >= 0.60
    assert figures(total, "class")["wrong"] <= 0.02


def test_common_groups_are_mostly_decided(tally):
    by_group = tally[1]
    for name, least in (("alkane_ch", 0.85), ("alcohol_oh", 0.75), ("aromatic", 0.70), ("ester", 0.80)):
        counts = by_group[name]
        there = sum(number for (_, true), number in counts.items() if true)
        assert counts["supported", True] / there >= least, name


@pytest.mark.parametrize(
    "name, most, spread", [("jtpolys.jdx", 1.3, 0.30), ("fixinc1.jdx", 1.8, 0.55), ("dupdec1.jdx", 1.3, 0.35)]
)
def test_polystyrene_bands_lie_where_they_should(by_name, name, most, spread):
    found = bands.pick(preparation.prepare(by_name[name].block, FILM, PARAMS), PARAMS, Phase.FILM)
    wanted = [p for p in POLYSTYRENE_CM1 if name != "jtpolys.jdx" or p not in NOT_SEPARABLE_CM1]
    pairs = []
    for position in wanted:
        band = min(
            found,
            key=lambda b: (abs(b.position_cm1 - position) > 4, b.kind != "maximum", abs(b.position_cm1 - position)),
        )
        assert abs(band.position_cm1 - position) < 4, position
        if band.kind == "maximum":
            pairs.append((position, band.position_cm1 - position))
    positions, errors = np.array(pairs).T
    assert np.abs(errors).max() <= most
    scale = (errors @ positions) / (positions @ positions)
    assert np.std(errors - scale * positions) <= spread


@pytest.mark.parametrize("reference, least", [("dupdec1.jdx", 7), ("fixinc1.jdx", 6)])
def test_the_foreign_polymer_in_the_film_is_left_over(by_name, reference, least):
    sample = preparation.prepare(by_name["jtpolys.jdx"].block, FILM, PARAMS)
    clean = preparation.prepare(by_name[reference].block, FILM, PARAMS)
    found, _ = impurities.screen(sample, FILM, clean, FILM, (), PARAMS)
    places = [item.position_cm1 for item in found.unexplained]
    assert sum(any(abs(p - q) <= 6 for p in places) for q in POLYCARBONATE_CM1) >= least
    assert all(any(abs(p - q) <= 8 for q in POLYCARBONATE_CM1) for p in places)


def test_condensed_materials_of_two_laboratories_agree():
    cases = [case for case in analysis_cases.film_cases() if case.smiles]
    ready = {case.name: preparation.prepare(case.block, case.conditions, PARAMS) for case in cases}
    for one in cases:
        for two in cases:
            if one is two or one.key != two.key or one.conditions.phase is not two.conditions.phase:
                continue
            found, _ = identity.compare(
                ready[one.name], one.conditions, ready[two.name], two.conditions, two.name, PARAMS
            )
            assert found.verdict in ("consistent", "cannot_be_compared"), (one.name, two.name, found.against)


def test_no_two_different_materials_are_called_consistent():
    cases = [case for case in analysis_cases.collection_cases() if case.smiles]
    ready = {case.name: preparation.prepare(case.block, case.conditions, PARAMS) for case in cases}
    rng = np.random.default_rng(7)
    pairs = [
        (one, two)
        for one in cases
        for two in cases
        if one.key != two.key and one.conditions.phase is two.conditions.phase
    ]
    for index in rng.choice(len(pairs), 400, replace=False):
        one, two = pairs[index]
        found, _ = identity.compare(ready[one.name], one.conditions, ready[two.name], two.conditions, two.name, PARAMS)
        assert found.verdict != "consistent", (one.name, two.name)


def test_gas_against_liquid_cannot_be_compared(by_name):
    gas, liquid = by_name["ethanol.jdx"], by_name["ethanol2.jdx"]
    found, _ = identity.compare(
        preparation.prepare(gas.block, gas.conditions, PARAMS),
        gas.conditions,
        preparation.prepare(liquid.block, liquid.conditions, PARAMS),
        liquid.conditions,
        "",
        PARAMS,
    )
    assert found.verdict == "cannot_be_compared"


def test_screening_candidates_keeps_the_best_explanation(by_name):
    from dataclasses import replace

    from spectra.core.groups.features import scene_of
    from spectra.core.groups.joint import weigh

    table = analysis_cases.table()
    for name in ("toluene.jdx", "vinyl acetate.jdx", "jtpolys.jdx", "1-butanol.jdx"):
        case = by_name[name]
        ready = preparation.prepare(case.block, case.conditions, PARAMS)
        scene = scene_of(ready, bands.pick(ready, PARAMS, case.conditions.phase), case.conditions, PARAMS)
        narrow = replace(PARAMS, largest_set=3)
        wide = replace(narrow, candidate_limit=40)
        assert set(weigh(scene, table, narrow).best_set) == set(weigh(scene, table, wide).best_set), name


@pytest.mark.parametrize("worse", ["noise", "slope", "resolution", "shift"])
def test_a_worse_measurement_never_flips_a_verdict(worse):
    for case in analysis_cases.film_cases()[::4]:
        x, a = np.array(case.block.x_cm1), np.array(case.block.y)
        if worse == "noise":
            a = a + np.random.default_rng(1).normal(0, 0.01, len(x))
        elif worse == "slope":
            a = a + 0.5 * (x - x[0]) / (x[-1] - x[0])
        elif worse == "resolution":
            a = preparation.gaussian_smooth(a, 1.0, 8.0)
        else:
            x = x + 2.0
        from tests.numeric.synthetic import block

        before, after = (_verdicts(b, case.conditions) for b in (case.block, block(x, a, resolution_cm1=None)))
        assert not [g for g in before if {before[g], after[g]} == {"supported", "contradicted"}], case.name


def _verdicts(block, conditions):
    ready = preparation.prepare(block, conditions, PARAMS)
    found = weigh_groups(ready, bands.pick(ready, PARAMS, conditions.phase), analysis_cases.table(), conditions, PARAMS)
    return {claim.group: claim.verdict for claim in found.claims}
