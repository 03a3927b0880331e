"""Water vapour and carbon dioxide: their line shapes, and how much of each a spectrum carries.

The carbon dioxide envelope is computed from rotational constants (B0 0.390219, B1 0.387141 cm-1, even J, 296 K). The
water line positions are strong lines of the bending and stretching bands, good to about half a wavenumber (from memory;
the HITRAN compilation lists them all).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

WATER_LINES_CM1 = (
    1507.0,
    1540.0,
    1559.0,
    1617.0,
    1636.0,
    1653.0,
    1685.0,
    1700.0,
    1717.0,
    1734.0,
    1772.0,
    3587.0,
    3629.0,
    3649.0,
    3675.0,
    3691.0,
    3711.0,
    3735.0,
    3744.0,
    3751.0,
    3801.0,
    3821.0,
    3838.0,
    3854.0,
)
WATER_REGIONS_CM1 = ((1480.0, 1900.0), (3560.0, 3900.0))
WATER_COMB_REGIONS_CM1 = ((1350.0, 1950.0), (3500.0, 3950.0))
CO2_REGION_CM1 = (2280.0, 2390.0)
CO2_BEND_CM1 = (664.0, 672.0)

LEAST_EXPLAINED = 0.7  # of the structure in the region; a broad hump of the sample stays below

_CO2_ORIGIN_CM1 = 2349.1433
_CO2_LOWER_B_CM1 = 0.390219
_CO2_UPPER_B_CM1 = 0.387141
_KELVIN_PER_CM1 = 1.438777


@dataclass(frozen=True)
class Residue:
    """How much of a gas is in the light path. `amplitude_absorbance` is signed: negative means over-corrected."""

    significance: float
    amplitude_absorbance: float


def co2_line_cm1(branch: str, j: int) -> float:
    """Position of the line R(j) or P(j) of the antisymmetric stretch in cm-1."""
    upper = j + 1 if branch == "R" else j - 1
    return _CO2_ORIGIN_CM1 + _CO2_UPPER_B_CM1 * upper * (upper + 1) - _CO2_LOWER_B_CM1 * j * (j + 1)


@lru_cache(maxsize=1)
def _co2_lines() -> tuple[np.ndarray, np.ndarray]:
    positions, strengths = [], []
    for j in range(0, 62, 2):
        population = np.exp(-_KELVIN_PER_CM1 * _CO2_LOWER_B_CM1 * j * (j + 1) / 296.0)
        positions.append(co2_line_cm1("R", j))
        strengths.append((j + 1) * population)
        if j > 0:
            positions.append(co2_line_cm1("P", j))
            strengths.append(j * population)
    return np.array(positions), np.array(strengths)


def _lines_on(x_cm1: np.ndarray, positions: np.ndarray, strengths: np.ndarray, fwhm_cm1: float) -> np.ndarray:
    sigma = fwhm_cm1 / 2.354820045
    shape = np.exp(-0.5 * ((x_cm1[:, None] - positions[None, :]) / sigma) ** 2) @ strengths
    top = shape.max() if len(shape) else 0.0
    return shape / top if top > 0 else shape


def co2_envelope(x_cm1: np.ndarray, fwhm_cm1: float) -> np.ndarray:
    """Shape of the antisymmetric stretch at a resolution of `fwhm_cm1`, strongest point 1."""
    return _lines_on(x_cm1, *_co2_lines(), fwhm_cm1)


def carbon_dioxide(x_cm1: np.ndarray, absorbance: np.ndarray, noise: float, fwhm_cm1: float) -> Residue | None:
    """Least squares of the computed envelope with a cubic baseline in 2230-2450 cm-1; None where that is not covered.

    absorbance : finite, shape of `x_cm1`. noise : standard deviation of its points. The significance is the share that
    the envelope explains, in units of the scatter that is left, and stays low when the shape does not fit.
    """
    inside = (x_cm1 > 2230) & (x_cm1 < 2450)
    if inside.sum() < 30:
        return None
    x, y = x_cm1[inside], absorbance[inside]
    u = (x - 2340.0) / 110.0
    baseline = np.vander(u, 4)
    # Real residues are broader than the linear limit because the strong lines saturate, so a second width is offered.
    shapes = [co2_envelope(x, max(fwhm_cm1, 4.0)), co2_envelope(x, max(fwhm_cm1, 4.0) + 4.0)]
    best: Residue | None = None
    plain_fit = y - baseline @ np.linalg.lstsq(baseline, y, rcond=None)[0]
    for shape in shapes:
        design = np.column_stack([baseline, shape])
        solution = np.linalg.lstsq(design, y, rcond=None)[0]
        rest = y - design @ solution
        before, after = float(plain_fit @ plain_fit), float(rest @ rest)
        if before <= 0:
            continue
        explained = 1 - after / before
        free = shape - baseline @ np.linalg.lstsq(baseline, shape, rcond=None)[0]
        spread = max(noise, float(np.sqrt(after / len(x))))
        significance = abs(solution[-1]) * float(np.linalg.norm(free)) / spread / np.sqrt(max(fwhm_cm1, 1.0))
        if explained < LEAST_EXPLAINED:
            significance = min(significance, 1.0)
        if best is None or significance > best.significance:
            best = Residue(significance=float(significance), amplitude_absorbance=float(solution[-1]))
    return best


def water_vapour(x_cm1: np.ndarray, absorbance: np.ndarray, noise: float, fwhm_cm1: float) -> Residue | None:
    """Correlation of the sharp structure with the water comb against the same comb moved aside; None: not covered.

    The moved combs (8 to 45 cm-1 away) measure what chance agreement this spectrum's own bands give, so that real
    bands, however many, do not pass for vapour.
    """
    covered = [(low, high) for low, high in WATER_REGIONS_CM1 if x_cm1[0] < low and x_cm1[-1] > high]
    if not covered:
        return None
    width = max(fwhm_cm1, 3.0)
    lines = np.array(WATER_LINES_CM1)
    step = float(x_cm1[1] - x_cm1[0])
    reach = max(3, int(round(12.0 / step)) | 1)
    kernel = np.hanning(reach + 2)[1:-1]
    kernel /= kernel.sum()
    sharp = absorbance - np.convolve(absorbance, kernel, mode="same")
    # One strong band must not decide: the structure is compressed before it is compared.
    scale = max(noise, float(np.median(np.abs(sharp))) * 1.4826, 1e-12)
    inside = np.zeros(len(x_cm1), dtype=bool)
    for low, high in covered:
        inside |= (x_cm1 > low) & (x_cm1 < high)
    squeezed = np.where(inside, np.tanh(sharp / (4 * scale)), 0.0)
    # Correlating with a comb of Gaussians is smoothing with one Gaussian and reading at the lines.
    reach = max(2, int(round(1.5 * width / step)))
    profile = np.exp(-0.5 * (np.arange(-reach, reach + 1) * step / (width / 2.354820045)) ** 2)
    matched = np.convolve(squeezed, profile, mode="same")
    shifts = np.concatenate([np.arange(-45.0, -7.5, 1.0), np.arange(-1.5, 1.6, 0.5), np.arange(8.0, 45.5, 1.0)])
    scores = np.interp(lines[None, :] + shifts[:, None], x_cm1, matched).mean(axis=1)
    near = np.abs(shifts) <= 1.5
    best = int(np.argmax(np.abs(scores[near])))
    chance = scores[~near]
    significance = abs(scores[near][best] - chance.mean()) / max(float(chance.std()), 1e-12)
    x = x_cm1[inside]
    comb = _lines_on(x, lines + shifts[near][best], np.ones(len(lines)), width)
    comb = comb - np.convolve(comb, kernel, mode="same")
    amplitude = float(comb @ sharp[inside]) / float(comb @ comb)
    return Residue(significance=float(significance), amplitude_absorbance=amplitude)
