"""The bench plot: what the browser is handed, decoded from its JSON the way BokehJS does."""

from __future__ import annotations

import base64
import gzip
import json
import subprocess
import sys
from collections.abc import Iterator

import numpy as np
import pytest
from django.conf import settings

from spectra.plots import band_key, bench_plot


def curves(points: int = 1701) -> dict[str, np.ndarray]:
    x_cm1 = np.linspace(600.0, 4000.0, points)
    noise = np.random.default_rng(7).normal(0.0, 1e-3, (3, points))
    trace = 0.8 * np.exp(-(((x_cm1 - 1711.6) / 9.0) ** 2)) + 0.1
    absorbance = trace + noise[0]
    absorbance[(x_cm1 > 2290) & (x_cm1 < 2390)] = np.nan
    return {
        "x_cm1": x_cm1,
        "absorbance": absorbance,
        "baseline": np.full(points, 0.1),
        "reference": trace - 0.1 + noise[1],
        "residual": noise[2],
    }


RESULT = {
    "bands": [
        {"position_cm1": 2925.64, "height_absorbance": 0.2, "prominence_absorbance": 0.1, "fwhm_cm1": 20.0},
        {"position_cm1": 1711.6, "height_absorbance": 0.8, "prominence_absorbance": 0.8, "fwhm_cm1": 15.0},
    ],
    "masked": [{"low_cm1": 2290.0, "high_cm1": 2390.0, "reason": "carbon dioxide of the air"}],
}
ALL = ("reference", "residual", "baseline")


def models(value: object) -> Iterator[dict]:
    """Every model written into the JSON, wherever it is nested."""
    if isinstance(value, dict):
        if value.get("type") == "object" and "name" in value:
            yield value
        for inner in value.values():
            yield from models(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from models(inner)


def named(item: dict, kind: str, name: str | None = None) -> list[dict]:
    found = [model["attributes"] for model in models(item) if model["name"] == kind]
    return found if name is None else [attributes for attributes in found if attributes.get("name") == name]


def column(source: dict, key: str) -> np.ndarray | list:
    (value,) = [entry for name, entry in source["data"]["entries"] if name == key]
    if isinstance(value, list):
        return value
    assert value["type"] == "ndarray"
    return np.frombuffer(gzip.decompress(base64.b64decode(value["array"]["data"])), dtype=value["dtype"])


def source(item: dict, name: str) -> dict:
    (found,) = named(item, "ColumnDataSource", name)
    return found


def test_wavenumber_falls_to_the_right() -> None:
    (x_range,) = [r for r in named(bench_plot(curves=curves(), result=RESULT), "Range1d") if r["start"] > 100]
    assert (x_range["start"], x_range["end"]) == (4000.0, 600.0)


def test_spectrum_and_residual_share_one_wavenumber_axis() -> None:
    item = bench_plot(curves=curves(), result=RESULT, overlays=ALL)
    main, below = named(item, "Figure", "spectrum")[0], named(item, "Figure", "residual")[0]
    assert below["x_range"]["id"] in json.dumps(main["x_range"])


def test_axes_say_quantity_and_unit() -> None:
    text = json.dumps(bench_plot(curves=curves(), result=RESULT, overlays=("residual",)), ensure_ascii=False)
    assert "wavenumber / cm⁻¹" in text and '"absorbance"' in text and "residual / A" in text


def test_every_measured_point_is_sent_once_in_single_precision() -> None:
    sent = source(bench_plot(curves=curves(), result=RESULT), "trace")
    assert column(sent, "x").dtype == np.float32
    np.testing.assert_allclose(column(sent, "y"), curves()["absorbance"], rtol=1e-6)


def test_masked_points_stay_gaps() -> None:
    sent = column(source(bench_plot(curves=curves(), result=RESULT), "trace"), "y")
    assert np.array_equal(np.isnan(sent), np.isnan(curves()["absorbance"]))


def test_transmittance_is_ten_to_the_minus_absorbance() -> None:
    item = bench_plot(curves=curves(), result=RESULT, show="transmittance")
    np.testing.assert_allclose(column(source(item, "trace"), "y"), 10.0 ** -curves()["absorbance"], rtol=1e-6)
    assert named(item, "Figure", "spectrum")[0]["tags"] == ["transmittance"]


def test_the_reference_stands_on_the_baseline_of_the_sample() -> None:
    sent = column(source(bench_plot(curves=curves(), result=RESULT, overlays=("reference",)), "trace"), "reference")
    np.testing.assert_allclose(sent, curves()["reference"] + 0.1, rtol=1e-5)


def test_bands_come_by_prominence_and_lie_on_the_trace() -> None:
    bands = source(bench_plot(curves=curves(), result=RESULT), "bands")
    assert column(bands, "key") == ["1711.6", "2925.6"]
    assert column(bands, "y")[0] == pytest.approx(0.9, abs=0.01)


def test_a_band_inside_a_mask_is_placed_between_its_readable_neighbours() -> None:
    result = {"bands": [{"position_cm1": 2340.0}], "masked": []}
    (height,) = column(source(bench_plot(curves=curves(), result=result), "bands"), "y")
    assert np.isfinite(height)


def test_fingerprint_region_and_masks_are_shaded() -> None:
    item = bench_plot(curves=curves(), result=RESULT)
    (fingerprint,) = named(item, "BoxAnnotation", "fingerprint")
    assert (fingerprint["left"], fingerprint["right"]) == (600.0, 1500.0)
    (mask,) = named(item, "BoxAnnotation", "masked")
    assert (mask["left"], mask["right"]) == (2290.0, 2390.0)


def test_no_fingerprint_region_above_its_limit() -> None:
    high = {"x_cm1": np.linspace(1600.0, 4000.0, 50), "absorbance": np.linspace(0.0, 1.0, 50)}
    assert not named(bench_plot(curves=high, result={}), "BoxAnnotation", "fingerprint")


def test_an_overlay_that_was_not_made_is_left_out() -> None:
    bare = {name: array for name, array in curves().items() if name in ("x_cm1", "absorbance")}
    item = bench_plot(curves=bare, result=RESULT, overlays=ALL)
    assert not named(item, "Figure", "residual")


def test_a_flat_or_wholly_masked_spectrum_still_draws() -> None:
    x_cm1 = np.linspace(600.0, 4000.0, 20)
    for values in (np.zeros(20), np.full(20, np.nan)):
        bench_plot(curves={"x_cm1": x_cm1, "absorbance": values}, result=RESULT, overlays=ALL)


@pytest.mark.parametrize(
    "wrong",
    [
        {"show": "reflectance"},
        {"overlays": ("shadow",)},
        {"curves": {"x_cm1": np.array([2.0, 1.0]), "absorbance": np.zeros(2)}},
        {"curves": {"x_cm1": np.array([1.0, 2.0]), "absorbance": np.zeros(3)}},
    ],
)
def test_what_cannot_be_drawn_is_refused(wrong: dict) -> None:
    with pytest.raises(ValueError):
        bench_plot(**{"curves": curves(), "result": RESULT} | wrong)


def test_no_code_travels_with_the_plot() -> None:
    text = json.dumps(bench_plot(curves=curves(), result=RESULT, overlays=ALL))
    assert "CustomJS" not in text and "<script" not in text


def test_bokehs_own_mark_and_toolbar_are_left_out() -> None:
    item = bench_plot(curves=curves(), result=RESULT)
    assert named(item, "Figure", "spectrum")[0]["toolbar_location"] is None
    assert all(toolbar.get("logo", "normal") is None for toolbar in named(item, "Toolbar"))


def test_fifteen_thousand_points_with_every_overlay_stay_small() -> None:
    body = json.dumps(bench_plot(curves=curves(15_000), result=RESULT, overlays=("reference", "residual")))
    assert len(gzip.compress(body.encode())) < 300_000


def test_equal_input_gives_equal_curves() -> None:
    first, second = (column(source(bench_plot(curves=curves(), result=RESULT), "trace"), "y") for _ in range(2))
    assert first.tobytes() == second.tobytes()


def test_the_link_key_is_the_same_as_in_the_templates() -> None:
    from labsite.templatetags.marks import band_key as key_of_templates

    for position_cm1 in (1711.6, 2925.64, 1711.65, 999.95, 0.05):
        assert band_key(position_cm1) == key_of_templates(position_cm1)


def test_bokeh_is_not_imported_before_a_plot_is_asked_for() -> None:
    code = "import sys, spectra.plots; sys.exit('bokeh' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], cwd=settings.BASE_DIR, timeout=60).returncode == 0
