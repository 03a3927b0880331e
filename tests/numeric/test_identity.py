"""Comparison with a reference: gates first, then bands, then figures; no figure decides alone."""

import numpy as np

from spectra.core import identity, preparation
from spectra.core.params import MethodParams
from spectra.core.results import IDENTITY_VERDICTS
from spectra.core.types import Conditions, Ordinate, Phase, Technique
from tests.numeric.synthetic import ALCOHOL, ESTER, axis, block, spectrum

PARAMS = MethodParams()
FILM = Conditions(phase=Phase.LIQUID, technique=Technique.TRANSMISSION)


def compared(sample, reference, sample_conditions=FILM, reference_conditions=FILM):
    first = preparation.prepare(block(*sample), sample_conditions, PARAMS)
    second = preparation.prepare(block(*reference), reference_conditions, PARAMS)
    return identity.compare(first, sample_conditions, second, reference_conditions, "reference", PARAMS)[0]


def test_the_same_material_is_consistent_despite_another_thickness_and_baseline():
    sample = spectrum([(p, 0.6 * h, w) for p, h, w in ESTER], seed=2, slope=0.1)
    found = compared(sample, spectrum(ESTER))
    assert found.verdict == "consistent" and found.agrees == "yes"
    assert not found.missing_bands and not found.extra_bands


def test_a_common_axis_shift_is_allowed_for():
    x, y = spectrum(ESTER, seed=2)
    found = compared((x + 2.0, y), spectrum(ESTER))
    assert found.verdict == "consistent"
    shift = next(m for m in found.metrics if m.name == "axis_shift_cm1")
    assert abs(shift.value - 2.0) <= 0.5


def test_another_material_is_not_consistent():
    found = compared(spectrum(ALCOHOL, seed=2), spectrum(ESTER))
    assert found.verdict == "not_consistent" and found.agrees == "no"


def test_a_missing_and_an_extra_band_are_named():
    changed = [b for b in ESTER if b[0] != 1375] + [(1600, 0.4, 20)]
    found = compared(spectrum(changed, seed=2), spectrum(ESTER))
    assert found.verdict != "consistent"
    assert any(abs(d.position_cm1 - 1375) < 4 for d in found.missing_bands)
    assert any(abs(d.position_cm1 - 1600) < 4 for d in found.extra_bands)


def test_a_band_of_another_size_is_named():
    changed = [(p, 3 * h if p == 1050 else h, w) for p, h, w in ESTER]
    found = compared(spectrum(changed, seed=2), spectrum(ESTER))
    assert any(abs(d.position_cm1 - 1050) < 4 and d.ratio > 2 for d in found.size_outliers)


def test_phase_and_technique_are_gates_and_not_footnotes():
    gas = Conditions(phase=Phase.GAS, technique=Technique.GAS_CELL)
    found = compared(spectrum(ESTER, seed=2), spectrum(ESTER), sample_conditions=gas)
    assert found.verdict == "cannot_be_compared" and found.agrees == "neutral"
    assert any("phases differ" in reason for reason in found.against)
    atr = Conditions(phase=Phase.LIQUID, technique=Technique.ATR)
    assert compared(spectrum(ESTER), spectrum(ESTER), sample_conditions=atr).verdict == "cannot_be_compared"


def test_a_range_without_the_fingerprint_region_cannot_be_compared():
    found = compared(spectrum(ESTER, x=axis(1400, 4000)), spectrum(ESTER))
    assert found.verdict == "cannot_be_compared"


def test_a_saturated_sample_cannot_be_compared():
    x, a = spectrum([(p, 9 * h, 2 * w) for p, h, w in ESTER])
    first = preparation.prepare(block(x, 10.0**-a, Ordinate.TRANSMITTANCE), FILM, PARAMS)
    second = preparation.prepare(block(*spectrum(ESTER)), FILM, PARAMS)
    assert identity.compare(first, FILM, second, FILM, "r", PARAMS)[0].verdict == "cannot_be_compared"


def test_noise_is_no_identity():
    x = axis()
    noise = (x, np.random.default_rng(1).normal(0, 0.01, len(x)))
    assert compared(noise, spectrum(ESTER)).verdict in ("cannot_be_compared", "not_consistent")


def test_every_figure_names_formula_and_region():
    found = compared(spectrum(ESTER, seed=2), spectrum(ESTER))
    assert found.verdict in IDENTITY_VERDICTS
    for metric in found.metrics:
        assert metric.formula and metric.pretreatment and metric.region_cm1[0] < metric.region_cm1[1]


def test_resolution_is_lowered_to_the_coarser_of_the_two():
    x, y = spectrum(ESTER, seed=2)
    coarse = (x, preparation.gaussian_smooth(y, 1.0, 8.0))
    assert compared(coarse, spectrum(ESTER)).verdict == "consistent"


def test_the_advice_of_a_common_solvent_is_for_solids_only():
    liquid = " ".join(compared(spectrum(ALCOHOL, seed=2), spectrum(ESTER)).would_decide)
    assert "solvent" not in liquid and "label" in liquid and "other containers" in liquid
    disc = Conditions(phase=Phase.SOLID, technique=Technique.DISC)
    solid = compared(spectrum(ALCOHOL, seed=2), spectrum(ESTER), disc, disc)
    assert "same solvent" in " ".join(solid.would_decide)
