"""From the spectrum as recorded to the working grid: resolution, grid, baseline, smoothing, masks.

Every step is recorded with its parameters, in order. The original is never changed.
"""

from __future__ import annotations

import math
import warnings

import numpy as np

from spectra.core import atmosphere, measurement
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.results import Mask, Prepared, Step
from spectra.core.types import Conditions, Finding, Severity, SpectrumBlock, frozen_array

FWHM_PER_SIGMA = 2.354820045030949
SMALLEST_POINTS = 50
MID_INFRARED_CM1 = (390.0, 4400.0)


def gaussian_smooth(values: np.ndarray, step_cm1: float, fwhm_cm1: float) -> np.ndarray:
    """Convolution with a Gaussian of `fwhm_cm1` on an even grid; the ends are extended by their own values.

    values : shape (n,), finite. Returns shape (n,). A width below half a step leaves the values as they are.
    """
    sigma = fwhm_cm1 / FWHM_PER_SIGMA / step_cm1
    if sigma < 0.2:
        return np.array(values, dtype=np.float64)
    reach = min(int(math.ceil(4 * sigma)), len(values) - 1)
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    kernel /= kernel.sum()
    padded = np.concatenate([np.full(reach, values[0]), values, np.full(reach, values[-1])])
    return np.convolve(padded, kernel, mode="valid")


def smoothing_gain(fwhm_cm1: float, independent_cm1: float) -> float:
    """Share of white noise that a Gaussian of `fwhm_cm1` leaves when independent points lie `independent_cm1` apart."""
    sigma = fwhm_cm1 / FWHM_PER_SIGMA
    if sigma <= 0:
        return 1.0
    return min(1.0, math.sqrt(independent_cm1 / (2 * math.sqrt(math.pi) * sigma)))


def savitzky_golay(
    values: np.ndarray, window: int, order: int, derivative: int = 0, spacing: float = 1.0
) -> np.ndarray:
    """Savitzky-Golay filter (1964, with the corrections of 1972): derivative per `spacing`, ends by their fit."""
    from scipy.signal import savgol_filter

    return savgol_filter(values, window, order, deriv=derivative, delta=spacing, mode="interp")


def degrade(values: np.ndarray, step_cm1: float, from_cm1: float, to_cm1: float) -> np.ndarray:
    """Lower the resolution of an even grid from `from_cm1` to `to_cm1` (both full widths); never raises it."""
    if to_cm1 <= from_cm1:
        return np.array(values, dtype=np.float64)
    return gaussian_smooth(values, step_cm1, math.sqrt(to_cm1**2 - from_cm1**2))


def resample(x_cm1: np.ndarray, values: np.ndarray, onto_cm1: np.ndarray) -> np.ndarray:
    """Cubic interpolation inside the range of `x_cm1`; NaN outside. `values` finite, `x_cm1` rising."""
    from scipy.interpolate import CubicSpline

    result = CubicSpline(x_cm1, values, extrapolate=False)(onto_cm1)
    return result


def depth_scaled(x_cm1: np.ndarray, absorbance: np.ndarray, reference_cm1: float = 1000.0) -> np.ndarray:
    """A' = A * nu / nu_ref: removes the growth of the penetration depth with wavelength from an ATR spectrum.

    Positions of strong bands stay shifted: anomalous dispersion is not removed by this.
    """
    return np.asarray(absorbance) * np.asarray(x_cm1) / reference_cm1


def baseline_of(x_cm1: np.ndarray, absorbance: np.ndarray, params: MethodParams) -> np.ndarray:
    """Asymmetrically reweighted penalised least squares (Baek, Park, Ahn, Choo, Analyst 140 (2015) 250).

    The stiffness lets a cosine of `baseline_period_cm1` pass at half its height: lambda = (period / 2 pi step)^4.
    """
    from pybaselines.whittaker import arpls

    step = float(x_cm1[1] - x_cm1[0])
    stiffness = (params.baseline_period_cm1 / (2 * math.pi * step)) ** 4
    with warnings.catch_warnings():
        # A flat trace lies on its baseline from the first round, which the library finds worth a warning.
        warnings.simplefilter("ignore")
        fitted, _ = arpls(absorbance, lam=stiffness, tol=params.baseline_tolerance, max_iter=params.baseline_iterations)
    return fitted


def prepare(block: SpectrumBlock, conditions: Conditions, params: MethodParams) -> Prepared:
    """Absorbance, measurement findings, working grid, baseline, smoothed trace and masks of one block.

    Raises CoreError when the block cannot be a mid-infrared spectrum (too few points, no overlap with the range) or
    when its ordinate needs an answer first.
    """
    _judge_range(block)
    recorded = measurement.to_absorbance(block, conditions, params)
    x, a, valid = recorded.x_cm1, recorded.values, recorded.valid
    stated = measurement.stated_resolution_cm1(block, conditions)
    spacing = float((x[-1] - x[0]) / (len(x) - 1))
    findings: list[Finding] = list(recorded.findings)
    findings += measurement.range_findings(x, params)
    findings += measurement.spacing_findings(spacing, stated)
    steps: list[Step] = [Step("absorbance", {"formula": recorded.formula, "points": len(x)})]

    even_x, even_a, even_valid = _on_even_points(x, a, valid, spacing)
    if not block.evenly_spaced and len(even_x) != len(x):
        steps.append(Step("even_spacing", {"step_cm1": float(even_x[1] - even_x[0])}))
    step_native = float(even_x[1] - even_x[0])
    resolution_in = max(stated or 2 * spacing, spacing)
    resolution = max(params.working_resolution_cm1, resolution_in)
    windows = measurement.noise_windows(even_x, even_a, even_valid, resolution_in, params)
    noise = measurement.overall_noise(windows, params)
    independent = max(step_native, resolution_in / 2)

    added = math.sqrt(max(resolution**2 - resolution_in**2, 0.0))
    filled = np.minimum(even_a, max(params.masked_absorbance, 1.0) * 1.5) if not recorded.relative else even_a
    lowered = degrade(filled, step_native, resolution_in, resolution)
    step = min(max(params.finest_grid_step_cm1, spacing), params.largest_grid_step_cm1)
    first = math.ceil(even_x[0] / step) * step
    grid = first + step * np.arange(int((even_x[-1] - first) / step + 1e-9) + 1)
    grid = grid[grid <= even_x[-1]]
    on_grid = resample(even_x, lowered, grid)
    steps.append(Step("resolution", {"from_cm1": resolution_in, "to_cm1": resolution}))
    steps.append(Step("grid", {"first_cm1": float(grid[0]), "step_cm1": step, "points": len(grid)}))

    usable, unreliable, masks, saturation = _saturation(
        even_x, even_a, even_valid, grid, on_grid, recorded.relative, params
    )
    findings += saturation
    baseline = baseline_of(grid, on_grid, params)
    steps.append(
        Step(
            "baseline",
            {
                "method": "arPLS",
                "period_cm1": params.baseline_period_cm1,
                "tolerance": params.baseline_tolerance,
                "iterations": params.baseline_iterations,
            },
        )
    )
    findings += measurement.baseline_findings(grid, baseline, params)
    smooth = gaussian_smooth(on_grid - baseline, step, resolution)
    steps.append(Step("smoothing", {"kind": "Gaussian", "fwhm_cm1": resolution}))

    noise_grid = noise * smoothing_gain(added, independent)
    noise_smooth = noise * smoothing_gain(math.hypot(added, resolution), independent)
    # Noise is constant in transmitted light, so in absorbance it grows as the light falls.
    growth = np.ones(len(grid)) if recorded.relative else 10.0 ** np.clip(on_grid, 0.0, params.masked_absorbance)
    local_noise = np.maximum(noise_smooth, 1e-9) * growth

    corrected = on_grid - baseline
    co2 = atmosphere.carbon_dioxide(grid, on_grid, noise_grid, resolution)
    water = atmosphere.water_vapour(grid, on_grid, noise_grid, resolution)
    findings += measurement.atmosphere_findings(water, co2, conditions.phase, params)
    findings += measurement.fringe_findings(
        measurement.fringes(grid, np.where(usable, on_grid, 0), noise_grid, params), params
    )
    readable = np.where(usable, smooth, 0.0)
    top = int(np.argmax(readable))
    findings += measurement.strength_findings(float(readable[top]), float(grid[top]), noise, recorded.relative, params)
    if noise <= 0:
        findings.append(
            Finding(
                "measurement.noise_unknown",
                Severity.INFO,
                "No noise could be measured: too few points, or data that were computed or smoothed.",
            )
        )
    return Prepared(
        x_cm1=frozen_array(grid),
        absorbance=frozen_array(np.where(usable, on_grid, np.nan)),
        baseline=frozen_array(baseline),
        corrected=frozen_array(np.where(usable, corrected, np.nan)),
        smooth=frozen_array(smooth),
        noise=frozen_array(local_noise),
        usable=_frozen_flags(usable),
        unreliable=_frozen_flags(unreliable),
        masks=tuple(masks),
        steps=tuple(steps),
        findings=tuple(findings),
        noise_absorbance=noise,
        resolution_cm1=resolution,
        relative=recorded.relative,
    )


def _judge_range(block: SpectrumBlock) -> None:
    x = block.x_cm1
    if len(x) < SMALLEST_POINTS:
        raise CoreError(
            "measurement.too_few_points",
            f"The block holds {len(x)} points; fewer than {SMALLEST_POINTS} are no spectrum to analyse.",
            remedy="Export the whole spectrum.",
        )
    low, high = MID_INFRARED_CM1
    if x[0] > 4000 or x[-1] < 400 or min(x[-1], high) - max(x[0], low) < 200:
        raise CoreError(
            "measurement.not_mid_infrared",
            f"The axis runs from {x[0]:.0f} to {x[-1]:.0f} cm-1, outside the mid-infrared.",
            remedy="Upload a spectrum between 4000 and 400 cm-1, or correct the axis unit.",
        )


def _on_even_points(
    x: np.ndarray, a: np.ndarray, valid: np.ndarray, spacing: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """The part inside the mid-infrared on evenly spaced points; filters below need them."""
    inside = (x >= MID_INFRARED_CM1[0]) & (x <= MID_INFRARED_CM1[1])
    x, a, valid = x[inside], a[inside], valid[inside]
    gaps = np.diff(x)
    if gaps.max() - gaps.min() <= 1e-3 * spacing + 2e-3:
        return np.linspace(x[0], x[-1], len(x)), a, valid
    step = max(float(np.median(gaps)), (x[-1] - x[0]) / 60000)
    even = np.linspace(x[0], x[-1], max(int(round((x[-1] - x[0]) / step)) + 1, 2))
    return even, np.interp(even, x, a), np.interp(even, x, valid.astype(float)) > 0.99


def _saturation(
    x: np.ndarray,
    a: np.ndarray,
    valid: np.ndarray,
    grid: np.ndarray,
    on_grid: np.ndarray,
    relative: bool,
    params: MethodParams,
) -> tuple[np.ndarray, np.ndarray, list[Mask], list[Finding]]:
    """Which grid points total absorption spoils, as masks and findings. Recorded and smoothed values both count."""
    if relative:
        flags = np.interp(grid, x, valid.astype(float)) > 0.99
        return flags, ~flags, [], []
    step = float(grid[1] - grid[0])
    dark = ~valid | (a > params.masked_absorbance)
    near = np.interp(grid, x, dark.astype(float)) > 0.01
    usable = ~(near | (on_grid > params.masked_absorbance))
    unreliable = (on_grid > params.unreliable_absorbance) | ~usable
    masks, findings = [], []
    for low, high in _runs(grid, ~usable):
        masks.append(Mask(low, high, f"total absorption (absorbance above {params.masked_absorbance:g})"))
    if masks:
        widest = max(masks, key=lambda m: m.high_cm1 - m.low_cm1)
        findings.append(
            Finding(
                "measurement.saturated",
                Severity.SERIOUS,
                f"{len(masks)} region(s) absorb so strongly (above {params.masked_absorbance:g}) that nothing can be "
                f"read in them; the widest is {widest.low_cm1:.0f}-{widest.high_cm1:.0f} cm-1.",
                region_cm1=(widest.low_cm1, widest.high_cm1 + step),
                remedy="Measure a thinner or more dilute specimen.",
            )
        )
    doubtful = _runs(grid, unreliable & usable)
    if doubtful:
        strongest = max(doubtful, key=lambda r: r[1] - r[0])
        findings.append(
            Finding(
                "measurement.heights_unreliable",
                Severity.WARNING,
                f"Absorbance exceeds {params.unreliable_absorbance:g} in {len(doubtful)} region(s); heights there are "
                "not believed, positions less so.",
                region_cm1=strongest,
                remedy="Measure a thinner specimen.",
            )
        )
    return usable, unreliable, masks, findings


def _runs(grid: np.ndarray, flags: np.ndarray) -> list[tuple[float, float]]:
    edges = np.flatnonzero(np.diff(np.concatenate([[0], flags.astype(np.int8), [0]])))
    return [(float(grid[a]), float(grid[b - 1])) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def _frozen_flags(flags: np.ndarray) -> np.ndarray:
    result = np.array(flags, dtype=bool, copy=True)
    result.setflags(write=False)
    return result
