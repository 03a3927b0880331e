"""What the core says about a measurement before anything is read from it."""

import numpy as np
import pytest

from spectra.core import measurement, preparation
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.types import Conditions, Ordinate, Technique
from tests.numeric.synthetic import ESTER, axis, block, spectrum

PARAMS = MethodParams()


def codes(x, y, ordinate=Ordinate.ABSORBANCE, conditions=Conditions(), **options):  # noqa: B008 - frozen
    return {f.code for f in preparation.prepare(block(x, y, ordinate, **options), conditions, PARAMS).findings}


@pytest.mark.parametrize("noise", [1e-4, 1e-3])
def test_noise_is_estimated_before_smoothing(noise):
    x, y = spectrum(ESTER, noise=noise)
    found = preparation.prepare(block(x, y, resolution_cm1=2.0), Conditions(), PARAMS).noise_absorbance
    assert found == pytest.approx(noise, rel=0.2)


def test_zero_filled_points_do_not_lower_the_noise():
    coarse = axis(step_cm1=2.0)
    _, y = spectrum(ESTER, x=coarse, noise=1e-3)
    fine = axis(400, 4000, 0.5)
    found = preparation.prepare(block(fine, np.interp(fine, coarse, y)), Conditions(), PARAMS)
    assert found.noise_absorbance == pytest.approx(1e-3, rel=0.35)


def test_a_clean_spectrum_has_no_warning():
    x, y = spectrum(ESTER)
    prepared = preparation.prepare(block(x, y), Conditions(), PARAMS)
    assert [f.code for f in prepared.findings if f.severity != "info"] == []


def test_saturation_masks_the_region_and_says_so():
    x, a = spectrum([(1740, 3.0, 30), (1240, 0.6, 30)])
    prepared = preparation.prepare(block(x, 10.0**-a, Ordinate.TRANSMITTANCE), Conditions(), PARAMS)
    assert {"measurement.saturated", "measurement.heights_unreliable"} <= {f.code for f in prepared.findings}
    assert len(prepared.masks) == 1 and prepared.masks[0].low_cm1 < 1740 < prepared.masks[0].high_cm1


def test_no_light_is_said_and_masked():
    x, a = spectrum(ESTER)
    t = 10.0**-a
    t[1300:1320] = -0.001
    prepared = preparation.prepare(block(x, t, Ordinate.TRANSMITTANCE), Conditions(), PARAMS)
    assert "measurement.no_light" in {f.code for f in prepared.findings}
    assert np.isnan(prepared.absorbance[np.abs(prepared.x_cm1 - x[1310]) < 5]).all()


def test_a_short_range_is_named():
    x, y = spectrum(ESTER, x=axis(900, 3000))
    assert "measurement.range" in codes(x, y)


def test_a_weak_and_a_noisy_spectrum_are_told_apart():
    x, y = spectrum([(p, 0.03 * h, w) for p, h, w in ESTER], noise=1e-5)
    assert "measurement.too_weak" in codes(x, y)
    x, y = spectrum(ESTER, noise=0.08)
    assert "measurement.too_noisy" in codes(x, y)


def test_fringes_give_their_period_and_a_thickness():
    x, y = spectrum(ESTER)
    found = preparation.prepare(block(x, y + 0.01 * np.sin(2 * np.pi * x / 83.0)), Conditions(), PARAMS)
    fringe = next(f for f in found.findings if f.code == "measurement.fringes")
    assert fringe.facts["period_cm1"] == pytest.approx(83, rel=0.03)
    assert fringe.facts["thickness_um"] == pytest.approx(1e4 / (2 * 1.5 * 83), rel=0.03)


def test_a_clean_spectrum_has_no_fringes():
    x, y = spectrum(ESTER)
    assert measurement.fringes(x, y, 2e-4, PARAMS) is None


def test_reflectance_without_a_technique_asks():
    x, y = spectrum(ESTER)
    with pytest.raises(CoreError) as caught:
        preparation.prepare(block(x, 10.0**-y, Ordinate.REFLECTANCE), Conditions(), PARAMS)
    assert caught.value.problem.question == "technique"
    preparation.prepare(block(x, 10.0**-y, Ordinate.REFLECTANCE), Conditions(technique=Technique.ATR), PARAMS)


def test_another_range_is_refused():
    x = np.linspace(5000, 9000, 2000)
    with pytest.raises(CoreError, match="mid-infrared"):
        preparation.prepare(block(x, np.zeros(2000)), Conditions(), PARAMS)
    with pytest.raises(CoreError, match="fewer than"):
        preparation.prepare(block(np.linspace(400, 4000, 20), np.zeros(20)), Conditions(), PARAMS)


def test_a_constant_trace_is_survived():
    x = axis()
    prepared = preparation.prepare(block(x, np.full(len(x), 0.2)), Conditions(), PARAMS)
    assert np.isfinite(prepared.smooth).all()


def test_a_normal_noise_is_a_figure_and_no_finding():
    x, y = spectrum(ESTER)
    prepared = preparation.prepare(block(x, y), Conditions(), PARAMS)
    assert prepared.noise_absorbance > 0
    assert not [f for f in prepared.findings if f.code.startswith("measurement.noise")]
