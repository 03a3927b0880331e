"""Band picking on invented spectra whose bands are known."""

import numpy as np
import pytest

from spectra.core import bands, preparation
from spectra.core.params import MethodParams
from spectra.core.types import Conditions, Ordinate, Phase
from tests.numeric.synthetic import ESTER, axis, block, spectrum

PARAMS = MethodParams()


def picked(x, y, ordinate=Ordinate.ABSORBANCE, phase=Phase.LIQUID, **options):
    prepared = preparation.prepare(block(x, y, ordinate, **options), Conditions(phase=phase), PARAMS)
    return bands.pick(prepared, PARAMS, phase)


def maxima(found):
    return [band for band in found if band.kind == "maximum"]


def test_every_true_band_is_found_and_nothing_else():
    found = maxima(picked(*spectrum(ESTER)))
    assert len(found) == len(ESTER)
    for position, _, width in ESTER:
        band = min(found, key=lambda b: abs(b.position_cm1 - position))
        assert abs(band.position_cm1 - position) < max(1.0, 0.1 * width)


def test_flat_noise_holds_no_band():
    x = axis()
    for seed in range(5):
        y = 0.1 + np.random.default_rng(seed).normal(0, 1e-3, len(x))
        assert len(maxima(picked(x, y))) <= 1  # the floor is relative, so one excursion may pass


def test_position_is_found_between_the_grid_points():
    for shift in np.arange(0, 2, 0.25):
        x = axis(step_cm1=1.929)
        _, y = spectrum([(1715.3 + shift, 0.5, 14)], x=x, noise=1e-5)
        band = max(picked(x, y), key=lambda b: b.height_absorbance)
        assert band.position_cm1 == pytest.approx(1715.3 + shift, abs=0.1)


def test_width_and_height_of_a_lone_band():
    band = max(picked(*spectrum([(1500, 0.8, 40)], noise=1e-5)), key=lambda b: b.height_absorbance)
    assert band.fwhm_cm1 == pytest.approx(40, rel=0.05)
    assert band.height_absorbance == pytest.approx(0.8, rel=0.04)


def test_offset_and_slope_leave_the_positions_alone():
    plain = maxima(picked(*spectrum(ESTER)))
    tilted = maxima(picked(*spectrum(ESTER, offset=0.3, slope=0.3)))
    for band in plain:
        assert min(abs(band.position_cm1 - other.position_cm1) for other in tilted) < 1.0


def test_percent_fraction_and_absorbance_give_one_list():
    x, a = spectrum(ESTER)
    lists = [
        picked(x, a),
        picked(x, 10.0**-a, Ordinate.TRANSMITTANCE),
        picked(x, 100 * 10.0**-a, Ordinate.PERCENT_TRANSMITTANCE),
    ]
    for other in lists[1:]:
        assert len(other) == len(lists[0])
        for one, two in zip(lists[0], other, strict=True):
            assert one.position_cm1 == pytest.approx(two.position_cm1, abs=1e-6)
            assert one.height_absorbance == pytest.approx(two.height_absorbance, rel=1e-6)


def test_twice_as_much_sample_moves_no_band_and_no_class():
    x, a = spectrum(ESTER, noise=1e-5)
    single, double = maxima(picked(x, a / 2)), maxima(picked(x, a))
    assert [b.intensity for b in single] == [b.intensity for b in double]


def test_a_saturated_band_is_flagged_and_not_positioned():
    x, a = spectrum([(1740, 3.5, 30), (1240, 0.6, 30), (2950, 0.4, 40)])
    found = picked(x, 10.0**-a, Ordinate.TRANSMITTANCE)
    saturated = [band for band in found if band.kind == "saturated"]
    assert len(saturated) == 1
    assert abs(saturated[0].position_cm1 - 1740) < 15
    assert saturated[0].position_uncertainty_cm1 > 5


def test_a_shoulder_is_listed_apart():
    found = picked(*spectrum([(1700, 0.8, 30), (1676, 0.3, 20), (1200, 0.5, 25)], noise=1e-5))
    shoulders = [band for band in found if band.kind == "shoulder"]
    assert any(abs(band.position_cm1 - 1676) < 6 for band in shoulders)


def test_water_vapour_lines_are_no_bands():
    from spectra.core.atmosphere import WATER_LINES_CM1

    x, clean = spectrum(ESTER)
    comb = sum(0.01 * np.exp(-4 * np.log(2) * ((x - line) / 4.0) ** 2) for line in WATER_LINES_CM1)
    for sign in (1, -1):
        prepared = preparation.prepare(block(x, clean + sign * comb), Conditions(phase=Phase.LIQUID), PARAMS)
        assert any(f.code == "measurement.water_vapour" for f in prepared.findings)
        found = maxima(bands.pick(prepared, PARAMS, Phase.LIQUID))
        assert len(found) <= len(ESTER) + 1


def test_carbon_dioxide_is_no_band_of_the_sample():
    from spectra.core.atmosphere import co2_envelope

    x, clean = spectrum(ESTER)
    prepared = preparation.prepare(block(x, clean + 0.05 * co2_envelope(x, 4.0)), Conditions(), PARAMS)
    assert any(f.code == "measurement.carbon_dioxide" for f in prepared.findings)
    assert not [b for b in bands.pick(prepared, PARAMS) if 2280 < b.position_cm1 < 2390]


def test_every_band_has_finite_numbers_and_known_words():
    for band in picked(*spectrum(ESTER)):
        assert np.isfinite([band.position_cm1, band.height_absorbance, band.fwhm_cm1, band.area_absorbance_cm1]).all()
        assert band.intensity in ("vs", "s", "m", "w", "vw")
        assert band.shape in ("sharp", "medium", "broad", "very broad")
        assert band.position_uncertainty_cm1 > 0
