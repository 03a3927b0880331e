"""Band picking: where a spectrum absorbs, with position between the grid points, size, shape and their uncertainty.

A band is a maximum of the smoothed, baseline-corrected absorbance whose prominence exceeds the local noise and a floor.
Shoulders (minima of the second derivative without a maximum) are listed apart. Vapour lines are never bands.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from spectra.core import atmosphere
from spectra.core.params import MethodParams
from spectra.core.results import Band, Prepared
from spectra.core.types import Finding, Phase

SHAPES = ("sharp", "medium", "broad", "very broad")
INTENSITIES = ("vs", "s", "m", "w", "vw")
LINE_WINDOW_CM1 = 3.5
LINE_WIDTH_CM1 = 12.0
LINE_GAP_CM1 = 80.0
CO2_LOBE_WIDTH_CM1 = 40.0


@dataclass(frozen=True)
class Fit:
    """Sub-grid maximum: position and height of a local polynomial."""

    position_cm1: float
    height: float


def parabola_vertex(x0: float, dx: float, y: np.ndarray) -> Fit:
    """Vertex through three points at x0, x0 + dx, x0 + 2 dx; y of shape (3,) with the largest in the middle."""
    left, middle, right = (float(v) for v in y)
    curvature = left - 2 * middle + right
    if curvature >= 0:
        return Fit(x0 + dx, middle)
    offset = 0.5 * (left - right) / curvature
    return Fit(x0 + dx + offset * dx, middle - 0.25 * (left - right) * offset)


def spline_vertex(x_cm1: np.ndarray, y: np.ndarray, index: int, points: int) -> Fit:
    """Maximum of the cubic spline through `points` grid points around `index`, at most one step away from it.

    Falls back to the parabola where the spline has no maximum there or fewer than five points are at hand.
    """
    from scipy.interpolate import CubicSpline

    half = max(2, points // 2)
    low, high = max(0, index - half), min(len(y), index + half + 1)
    step = float(x_cm1[1] - x_cm1[0])
    near = slice(max(0, index - 1), index + 2)
    if high - low >= 5:
        spline = CubicSpline(x_cm1[low:high], y[low:high])
        k = min(max(index - low, 1), high - low - 2)
        best: Fit | None = None
        for piece in (k - 1, k):
            c3, c2, c1, c0 = (float(v) for v in spline.c[:, piece])
            start = float(spline.x[piece])
            for offset in _maxima_of_cubic(c3, c2, c1, step):
                height = ((c3 * offset + c2) * offset + c1) * offset + c0
                if best is None or height > best.height:
                    best = Fit(start + offset, height)
        if best is not None:
            return best
    if len(y[near]) < 3:
        return Fit(float(x_cm1[index]), float(y[index]))
    return parabola_vertex(float(x_cm1[near][0]), step, y[near])


def _maxima_of_cubic(c3: float, c2: float, c1: float, width: float) -> list[float]:
    """Places between 0 and `width` where c3 u^3 + c2 u^2 + c1 u has a maximum."""
    if abs(c3) * width < 1e-12 * abs(c2):
        roots = [-c1 / (2 * c2)] if c2 < 0 else []
    else:
        inside = c2 * c2 - 3 * c3 * c1
        roots = [(-c2 - math.sqrt(inside)) / (3 * c3)] if inside > 0 else []
    return [u for u in roots if -1e-9 <= u <= width + 1e-9]


def intensity_class(height: float, strongest: float, params: MethodParams) -> str:
    """vs, s, m, w or vw by the share of the strongest band."""
    share = height / strongest if strongest > 0 else 0.0
    limits = (params.very_strong_level, params.strong_level, params.medium_level, params.weak_level)
    for name, limit in zip(INTENSITIES, limits, strict=False):
        if share >= limit:
            return name
    return "vw"


def shape_class(fwhm_cm1: float, params: MethodParams) -> str:
    """sharp, medium, broad or very broad by full width at half maximum."""
    limits = (params.sharp_width_cm1, params.medium_width_cm1, params.broad_width_cm1)
    for name, limit in zip(SHAPES, limits, strict=False):
        if fwhm_cm1 < limit:
            return name
    return "very broad"


def pick(prepared: Prepared, params: MethodParams, phase: Phase | None = None) -> tuple[Band, ...]:
    """All bands of a prepared spectrum in rising order of position.

    Threshold: prominence at least `prominence_in_noise` times the local noise of the smoothed trace and at least
    `prominence_floor_of_strongest` of the strongest readable band.
    """
    from scipy.signal import find_peaks, peak_widths

    x, y, noise = prepared.x_cm1, prepared.smooth, prepared.noise
    step = prepared.step_cm1
    readable = np.where(prepared.usable, y, -np.inf)
    strongest = float(readable.max()) if prepared.usable.any() else 0.0
    if not np.isfinite(strongest) or strongest <= 0:
        strongest = float(y.max())
    threshold = np.maximum(params.prominence_in_noise * noise, params.prominence_floor_of_strongest * strongest)
    edge = max(3, int(round(prepared.resolution_cm1 / step)))
    peaks, facts = find_peaks(y, prominence=float(threshold.min()), plateau_size=1)
    prominences = facts["prominences"]
    keep = (prominences >= threshold[peaks]) & (peaks >= edge) & (peaks < len(y) - edge) & prepared.usable[peaks]
    peaks, prominences = peaks[keep], prominences[keep]
    bases = (prominences, facts["left_bases"][keep], facts["right_bases"][keep])
    if not len(peaks):
        widths = np.zeros(0)
    else:
        widths = peak_widths(y, peaks, rel_height=0.5, prominence_data=bases)[0] * step
    found: list[Band] = []
    for index, prominence, width in zip(peaks, prominences, widths, strict=True):
        fit = _position(prepared, int(index), params)
        # Smoothing and the instrument both widen a band; the width that is left is that of the band itself.
        fwhm = math.sqrt(max(float(width) ** 2 - prepared.resolution_cm1**2, (0.5 * prepared.resolution_cm1) ** 2))
        height = max(fit.height, float(prominence) * 0.1)
        snr = float(height / noise[index])
        found.append(
            Band(
                position_cm1=fit.position_cm1,
                position_uncertainty_cm1=_position_uncertainty(
                    fwhm, float(prominence), float(noise[index]), bool(prepared.unreliable[index]), prepared, params
                ),
                height_absorbance=height,
                prominence_absorbance=float(prominence),
                fwhm_cm1=fwhm,
                area_absorbance_cm1=_area(x, y, int(index), bases[1], bases[2], peaks),
                intensity=intensity_class(height, strongest, params),
                shape=shape_class(fwhm, params),
                snr=snr,
                kind="maximum",
            )
        )
    found += _saturated(prepared, strongest, params)
    found += _shoulders(prepared, found, strongest, threshold, params)
    found = [band for band in found if not _is_atmosphere(band, prepared, found, strongest, phase)]
    return tuple(sorted(found, key=lambda band: band.position_cm1))


def _position(prepared: Prepared, index: int, params: MethodParams) -> Fit:
    """Position between the grid points.

    Smoothing pulls a band towards its neighbours, so a band that stands clear of the noise is read on the trace before
    smoothing; a weak one on the smoothed trace. The height is the smoothed trace's in both cases.
    """
    x, y = prepared.x_cm1, prepared.smooth
    fit = spline_vertex(x, y, index, params.position_points)
    if y[index] < params.clear_signal_to_noise * prepared.noise[index]:
        return fit
    reach = max(2, int(round(0.5 * prepared.resolution_cm1 / prepared.step_cm1)))
    low, high = max(0, index - reach), min(len(y), index + reach + 1)
    trace = prepared.corrected
    if not np.isfinite(trace[max(0, low - 5) : high + 5]).all():
        return fit
    top = low + int(np.argmax(trace[low:high]))
    if top in (low, high - 1):
        return fit
    return Fit(spline_vertex(x, trace, top, params.position_points).position_cm1, fit.height)


def _position_uncertainty(
    fwhm: float, prominence: float, noise: float, unreliable: bool, prepared: Prepared, params: MethodParams
) -> float:
    """Standard uncertainty: noise over the band's curvature, a share of the grid step, and the axis."""
    random = 0.6 * max(fwhm, prepared.resolution_cm1) * noise / max(prominence, 1e-12)
    grid = 0.1 * prepared.step_cm1
    saturation = 0.2 * fwhm if unreliable else 0.0
    return math.sqrt(random**2 + grid**2 + saturation**2 + params.axis_uncertainty_cm1**2)


def _area(x: np.ndarray, y: np.ndarray, index: int, lefts: np.ndarray, rights: np.ndarray, peaks: np.ndarray) -> float:
    """Area above zero between the valleys on both sides, in absorbance times cm-1."""
    order = int(np.searchsorted(peaks, index))
    low = int(lefts[order]) if order == 0 else int(peaks[order - 1] + np.argmin(y[peaks[order - 1] : index + 1]))
    high = int(rights[order]) if order == len(peaks) - 1 else int(index + np.argmin(y[index : peaks[order + 1] + 1]))
    part = np.maximum(y[low : high + 1], 0.0)
    return float(np.trapezoid(part, x[low : high + 1]))


def _saturated(prepared: Prepared, strongest: float, params: MethodParams) -> list[Band]:
    """One entry for each region of total absorption: the middle and half the width stand for what cannot be read."""
    bands = []
    for mask in prepared.masks:
        width = mask.high_cm1 - mask.low_cm1 + prepared.step_cm1
        height = max(params.masked_absorbance, strongest)
        bands.append(
            Band(
                position_cm1=0.5 * (mask.low_cm1 + mask.high_cm1),
                position_uncertainty_cm1=max(0.5 * width, 1.0),
                height_absorbance=height,
                prominence_absorbance=height,
                fwhm_cm1=width,
                area_absorbance_cm1=height * width,
                intensity="vs",
                shape=shape_class(width, params),
                snr=1.0,
                kind="saturated",
            )
        )
    return bands


def _shoulders(
    prepared: Prepared, found: list[Band], strongest: float, threshold: np.ndarray, params: MethodParams
) -> list[Band]:
    """Minima of the second derivative that no maximum accounts for; their heights are the trace's own."""
    from scipy.signal import find_peaks

    from spectra.core.preparation import savitzky_golay

    x, y, step = prepared.x_cm1, prepared.smooth, prepared.step_cm1
    window = max(7, int(round(1.6 * prepared.resolution_cm1 * math.sqrt(2) / step)) | 1)
    if len(y) < 4 * window:
        return []
    curve = -savitzky_golay(y, window, 4, 2, step)
    quiet = np.percentile(np.abs(curve), 30) * 1.48 * 1.5
    width2 = 2 * prepared.resolution_cm1**2
    # A band of the threshold's height and twice the resolution bends the trace by this much.
    bend = np.maximum(threshold * 8 * math.log(2) / (4 * width2), params.shoulder_in_noise * quiet)
    minima, _ = find_peaks(curve, height=float(bend.min()), prominence=float(bend.min()) * 0.5)
    centres = np.array([band.position_cm1 for band in found])
    reach = np.array([max(band.fwhm_cm1 * 0.5, prepared.resolution_cm1 * 1.5) for band in found])
    result = []
    for index in minima:
        if index < window or index >= len(y) - window or not prepared.usable[index]:
            continue
        if curve[index] < bend[index] or y[index] < 2 * threshold[index]:
            continue
        if len(centres) and np.any(np.abs(centres - x[index]) < np.minimum(reach, 12.0)):
            continue
        height = float(y[index])
        width = 2 * math.sqrt(2 * math.log(2) * height / float(curve[index])) if curve[index] > 0 else 0.0
        width = min(width, 40.0)
        result.append(
            Band(
                position_cm1=float(x[index]),
                position_uncertainty_cm1=math.hypot(0.25 * width, params.axis_uncertainty_cm1),
                height_absorbance=height,
                prominence_absorbance=float(threshold[index]),
                fwhm_cm1=width,
                area_absorbance_cm1=0.0,
                intensity=intensity_class(height, strongest, params),
                shape=shape_class(width, params),
                snr=float(height / prepared.noise[index]),
                kind="shoulder",
            )
        )
    return result


def _finding(findings: tuple[Finding, ...], code: str) -> Finding | None:
    return next((item for item in findings if item.code == code), None)


def _is_atmosphere(band: Band, prepared: Prepared, found: list[Band], strongest: float, phase: Phase | None) -> bool:
    """Whether a band is a line of the air in the light path rather than of the sample."""
    co2 = _finding(prepared.findings, "measurement.carbon_dioxide")
    if co2 is not None:
        amplitude = abs(float(co2.facts["amplitude_absorbance"]))
        sample_is_co2 = amplitude > 0.5 * strongest
        low, high = atmosphere.CO2_REGION_CM1
        if (
            not sample_is_co2
            and low < band.position_cm1 < high
            and band.fwhm_cm1 < CO2_LOBE_WIDTH_CM1
            and band.height_absorbance < 2.5 * amplitude
        ):
            return True
        low, high = atmosphere.CO2_BEND_CM1
        if (
            not sample_is_co2
            and low < band.position_cm1 < high
            and band.fwhm_cm1 < LINE_WIDTH_CM1
            and band.prominence_absorbance < 3 * amplitude
        ):
            return True
    water = _finding(prepared.findings, "measurement.water_vapour")
    if water is not None:
        amplitude = float(water.facts["amplitude_absorbance"])
        # Between lines of over-corrected vapour the trace stands up like a band, as wide as the gap between two lines.
        if band.fwhm_cm1 >= (LINE_WIDTH_CM1 if amplitude > 0 else LINE_GAP_CM1):
            return False
        amplitude = abs(amplitude)
        inside = any(low < band.position_cm1 < high for low, high in atmosphere.WATER_COMB_REGIONS_CM1)
        on_line = min(abs(band.position_cm1 - line) for line in atmosphere.WATER_LINES_CM1) < LINE_WINDOW_CM1
        if inside and amplitude < 0.1 * strongest and band.prominence_absorbance < (4 if on_line else 1.5) * amplitude:
            return True
    return False
