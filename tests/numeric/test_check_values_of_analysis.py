"""Worked numbers with their sources (fixtures/check_values/analysis.json) against the core's own functions."""

import json
from pathlib import Path

import numpy as np
import pytest

from spectra.core import atmosphere, bands, identity, impurities, measurement, preparation
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.structure import degrees_of_unsaturation
from spectra.core.types import Conditions
from tests.numeric.synthetic import axis, block, gaussian, lorentzian, spectrum

FILE = Path(__file__).resolve().parents[2] / "fixtures" / "check_values" / "analysis.json"
CHECKS = {row["id"]: row for row in json.loads(FILE.read_text(encoding="utf-8"))["checks"]}


def rows(prefix):
    return [pytest.param(row, id=key) for key, row in CHECKS.items() if key.startswith(prefix)]


def test_every_value_names_source_and_status():
    for row in CHECKS.values():
        assert row["source"] and row["status"] in ("confirmed", "memory")


@pytest.mark.parametrize("row", [r for r in rows("AT-") if r.id != "AT-ZERO"])
def test_absorbance_is_the_negative_logarithm_of_transmittance(row):
    found = measurement.absorbance_from_transmittance(np.array([row["inputs"]["T"]]))[0]
    assert found == pytest.approx(row["expected"], abs=row["tolerance"])


def test_no_light_is_marked_and_never_infinite():
    assert np.isnan(measurement.absorbance_from_transmittance(np.array([CHECKS["AT-ZERO"]["inputs"]["T"], -0.1]))).all()


@pytest.mark.parametrize("row", rows("KM-"))
def test_kubelka_munk(row):
    assert measurement.kubelka_munk(np.array([row["inputs"]["R"]]))[0] == pytest.approx(row["expected"], rel=1e-4)


@pytest.mark.parametrize("row", rows("DBE-"))
def test_degrees_of_unsaturation(row):
    assert degrees_of_unsaturation(row["inputs"]["formula"]) == row["expected"]


@pytest.mark.parametrize("row", [r for r in rows("SG-") if "-d" in r.id])
def test_savitzky_golay_weights(row):
    window, order, derivative = row["inputs"]["spec"].split(",")
    impulse = np.zeros(4 * int(window))
    impulse[2 * int(window)] = 1
    found = preparation.savitzky_golay(impulse, int(window), int(order), int(derivative[1:]))
    half = int(window) // 2
    weights = found[2 * int(window) - half : 2 * int(window) + half + 1][::-1]
    assert weights == pytest.approx(np.array(row["expected"]["num"]) / row["expected"]["den"], abs=1e-9)


def test_savitzky_golay_value_and_spacing():
    row = CHECKS["SG-VAL"]
    assert preparation.savitzky_golay(np.array(row["inputs"]["y"], float), 5, 2)[2] == pytest.approx(
        row["expected"], abs=row["tolerance"]
    )
    x = np.arange(0, 40, 2.0)
    second = preparation.savitzky_golay(x**2, 7, 2, 2, 2.0)
    assert second == pytest.approx(np.full(len(x), CHECKS["SG-DX"]["expected"]), abs=1e-9)


def test_second_derivative_at_the_top_of_a_gaussian():
    row = CHECKS["D2-GAUSS"]
    x = np.arange(-40, 40.05, 0.1)
    second = preparation.savitzky_golay(gaussian(x, 0, 1, row["inputs"]["w"]), 11, 4, 2, 0.1)
    assert second[len(x) // 2] == pytest.approx(row["expected"], rel=1e-4)


def test_parabola_vertex():
    row = CHECKS["PEAK-PARAB"]
    middle, step = row["inputs"]["x0"], row["inputs"]["dx"]
    fit = bands.parabola_vertex(middle - step, step, np.array(row["inputs"]["y"]))
    assert fit.position_cm1 == pytest.approx(row["expected"]["x"], abs=row["tolerance"])
    assert fit.height == pytest.approx(row["expected"]["y"], abs=1e-6)


def test_highest_point_of_a_coarse_grid_misleads_and_the_parabola_does_not():
    row = CHECKS["PEAK-GRID"]
    given = row["inputs"]
    x = given["start"] + given["step"] * np.arange(120)
    y = lorentzian(x, given["centre"], 1.0, given["fwhm"])
    top = int(np.argmax(y))
    assert x[top] - given["centre"] == pytest.approx(row["expected"]["max_error"], abs=row["tolerance"])
    fit = bands.parabola_vertex(x[top - 1], given["step"], y[top - 1 : top + 2])
    assert fit.position_cm1 - given["centre"] == pytest.approx(row["expected"]["parabola_error"], abs=row["tolerance"])
    spline = bands.spline_vertex(x, y, top, 9)
    assert abs(spline.position_cm1 - given["centre"]) < 0.05


def test_depth_scaling_of_an_atr_spectrum():
    row = CHECKS["ATR-CORR"]
    given = row["inputs"]
    assert preparation.depth_scaled(np.array([given["nu"]]), np.array([given["A"]]), given["nu_ref"])[
        0
    ] == pytest.approx(row["expected"])


@pytest.mark.parametrize("key, shape", [("AREA-G", gaussian)])
def test_area_of_a_picked_band(key, shape):
    x, y = spectrum([(1500, 0.8, 40)], shape=shape, noise=1e-6)
    prepared = preparation.prepare(block(x, y), Conditions(), MethodParams())
    band = max(bands.pick(prepared, MethodParams()), key=lambda b: b.height_absorbance)
    assert band.area_absorbance_cm1 == pytest.approx(CHECKS[key]["expected"] * 0.8 * 40, rel=0.03)


def test_currie_limits_are_kept_apart():
    limits = impurities.currie_limits(CHECKS["CURRIE-G"]["inputs"]["sigma0"])
    expected = CHECKS["CURRIE-G"]["expected"]
    assert (limits.decision, limits.detection, limits.determination) == pytest.approx(
        (expected["LC"], expected["LD"], expected["LQ"]), abs=1e-5
    )


def test_amounts_are_never_negative_and_not_clipped():
    row = CHECKS["NNLS-1"]
    solution, rest = impurities.nonnegative_fit(np.array(row["inputs"]["K"]), np.array(row["inputs"]["y"]))
    assert solution == pytest.approx(row["expected"]["nnls"], abs=row["tolerance"])
    assert rest == pytest.approx(row["expected"]["residual_norm"], abs=1e-5)


def test_extra_sum_of_squares():
    row = CHECKS["FTEST-1"]
    k, y = np.array(row["inputs"]["K"], float), np.array(row["inputs"]["y"])
    value, p = impurities.extra_sum_of_squares(k[:, :1], k, y)
    assert value == pytest.approx(row["expected"]["F"], rel=1e-4)
    assert p == pytest.approx(row["expected"]["p"], rel=1e-3)


A, B = (np.array(CHECKS["SCORE-COS"]["inputs"][k], float) for k in "ab")


def test_scores_of_two_short_vectors():
    assert identity.cosine(A, B) == pytest.approx(CHECKS["SCORE-COS"]["expected"], abs=1e-6)
    assert identity.pearson(A, B) == pytest.approx(CHECKS["SCORE-R"]["expected"], abs=1e-6)
    assert identity.derivative_correlation(A, B) == pytest.approx(CHECKS["SCORE-R1"]["expected"], abs=1e-6)
    assert identity.euclidean_of_units(A, B) == pytest.approx(CHECKS["SCORE-ED"]["expected"], abs=1e-6)
    assert identity.spectral_angle_deg(A, B) == pytest.approx(CHECKS["SCORE-SAM"]["expected"], abs=1e-5)


def test_what_each_score_ignores():
    gain, ramp = CHECKS["SCORE-INV-1"]["expected"], CHECKS["SCORE-INV-2"]["expected"]
    assert identity.pearson(A, 2 * A + 0.5) == pytest.approx(gain["r"])
    assert identity.cosine(A, 2 * A + 0.5) == pytest.approx(gain["cos"], abs=1e-6)
    tilted = A + 0.5 * np.arange(len(A))
    assert identity.pearson(A, tilted) == pytest.approx(ramp["r"], abs=1e-6)
    assert identity.derivative_correlation(A, tilted) == pytest.approx(ramp["r1"], abs=1e-9)


def test_a_flat_spectrum_has_no_score():
    with pytest.raises(CoreError, match="constant"):
        identity.pearson(A, np.ones(len(A)))


def test_carbon_dioxide_lines_and_envelope():
    assert atmosphere.co2_line_cm1("R", 16) == pytest.approx(CHECKS["CO2-R16"]["expected"], abs=0.003)
    assert atmosphere.co2_line_cm1("P", 16) == pytest.approx(CHECKS["CO2-P16"]["expected"], abs=0.003)
    x = axis(2280, 2400, 0.1)
    shape = atmosphere.co2_envelope(x, 4.0)
    expected = CHECKS["CO2-ENV4"]["expected"]
    high, low = x > 2349, x < 2349
    assert x[high][np.argmax(shape[high])] == pytest.approx(expected["R"], abs=0.5)
    assert x[low][np.argmax(shape[low])] == pytest.approx(expected["P"], abs=0.5)
