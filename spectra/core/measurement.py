"""What a measurement can bear: absorbance, noise, saturation, fringes, residues, each with a region and a remedy.

Nothing is corrected here. Definitions: absorbance A = -log10(T); noise is a standard deviation of neighbouring points
taken before any smoothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spectra.core import atmosphere
from spectra.core.errors import CoreError
from spectra.core.formats.stated import resolution_named
from spectra.core.params import MethodParams
from spectra.core.types import Conditions, Finding, Ordinate, Phase, Severity, SpectrumBlock, Technique

ABSORBANCE_CEILING = 4.0  # stands in for total absorption while smoothing; such points are masked afterwards


@dataclass(frozen=True)
class Absorbance:
    """Absorbance of a block on its own axis: `values` finite (total absorption filled), `valid` False where filled."""

    x_cm1: np.ndarray
    values: np.ndarray
    valid: np.ndarray
    relative: bool
    formula: str
    findings: tuple[Finding, ...]


def absorbance_from_transmittance(transmittance: np.ndarray) -> np.ndarray:
    """A = -log10(T) for T as a fraction; NaN where T is zero or below, which is total absorption and not a number."""
    t = np.asarray(transmittance, dtype=np.float64)
    result = np.full(t.shape, np.nan)
    positive = t > 0
    result[positive] = -np.log10(t[positive])
    return result


def transmittance_from_absorbance(absorbance: np.ndarray) -> np.ndarray:
    """T = 10^-A, as a fraction."""
    return np.power(10.0, -np.asarray(absorbance, dtype=np.float64))


def kubelka_munk(reflectance: np.ndarray) -> np.ndarray:
    """f(R) = (1 - R)^2 / (2 R) for 0 < R <= 1 (Kubelka and Munk 1931); NaN outside."""
    r = np.asarray(reflectance, dtype=np.float64)
    result = np.full(r.shape, np.nan)
    good = (r > 0) & (r <= 1)
    result[good] = (1 - r[good]) ** 2 / (2 * r[good])
    return result


def stated_resolution_cm1(block: SpectrumBlock, conditions: Conditions) -> float | None:
    """Resolution from the conditions, else from the file's header, else None."""
    if conditions.resolution_cm1:
        return float(conditions.resolution_cm1)
    return resolution_named(str(block.headers.get("RESOLUTION", "")))


def to_absorbance(block: SpectrumBlock, conditions: Conditions, params: MethodParams) -> Absorbance:
    """Absorbance by ordinate and technique. Reflectance without a known technique is refused with a question."""
    y = np.asarray(block.y, dtype=np.float64)
    x = np.asarray(block.x_cm1, dtype=np.float64)
    findings: list[Finding] = []
    relative = False
    ordinate = block.ordinate_used
    if ordinate in (Ordinate.TRANSMITTANCE, Ordinate.PERCENT_TRANSMITTANCE):
        t = y / 100 if ordinate is Ordinate.PERCENT_TRANSMITTANCE else y
        a, formula = absorbance_from_transmittance(t), "A = -log10(T)"
        findings += _transmittance_findings(x, t, params)
    elif ordinate is Ordinate.REFLECTANCE:
        if conditions.technique is Technique.ATR:
            a, formula = absorbance_from_transmittance(y), "A = -log10(R), reflectance of an ATR element"
            findings += _transmittance_findings(x, y, params)
        elif conditions.technique is Technique.DIFFUSE:
            a, formula, relative = kubelka_munk(y), "f(R) = (1 - R)^2 / (2 R)", True
        else:
            raise CoreError(
                "measurement.reflectance_meaning",
                "The ordinate is reflectance, and what that means depends on the technique.",
                remedy="State whether it was measured by attenuated or by diffuse reflection.",
                question="technique",
            )
    elif ordinate is Ordinate.ABSORPTIVITY:
        a, formula, relative = y.copy(), "proportional to absorbance, strongest point set to 1", True
    else:
        a, formula = y.copy(), "as recorded"
    if relative:
        top = float(np.nanmax(np.abs(a))) if np.isfinite(a).any() else 0.0
        if top > 0:
            a = a / top
        findings.append(
            Finding(
                "measurement.relative_ordinate",
                Severity.INFO,
                "The ordinate carries no absolute absorbance; heights are relative to the strongest point, which is 1.",
                remedy="Judge saturation on the original measurement.",
            )
        )
    valid = np.isfinite(a)
    a = np.where(valid, np.minimum(a, ABSORBANCE_CEILING), ABSORBANCE_CEILING)
    return Absorbance(x, a, valid, relative, formula, tuple(findings))


def _transmittance_findings(x_cm1: np.ndarray, t: np.ndarray, params: MethodParams) -> list[Finding]:
    findings = []
    dark = t <= 0
    if dark.any():
        findings.append(
            Finding(
                "measurement.no_light",
                Severity.WARNING,
                f"{int(dark.sum())} points have a transmittance of zero or below: no light came through.",
                region_cm1=(float(x_cm1[dark].min()), float(x_cm1[dark].max())),
                remedy="Measure a thinner or more dilute specimen; the points are not used.",
            )
        )
    excess = float(t.max()) - 1
    if excess > params.excess_transmittance:
        where = float(x_cm1[int(np.argmax(t))])
        findings.append(
            Finding(
                "measurement.transmittance_above_one",
                Severity.WARNING,
                f"Transmittance reaches {100 * (1 + excess):.1f} % at {where:.0f} cm-1, "
                "more than the background let through.",
                region_cm1=(where - 5, where + 5),
                remedy="Record a fresh background under the same conditions.",
            )
        )
    return findings


def noise_windows(
    x_cm1: np.ndarray, absorbance: np.ndarray, valid: np.ndarray, resolution_cm1: float, params: MethodParams
) -> list[tuple[float, float, float]]:
    """(low, high, standard deviation) of a cubic's residual in consecutive windows, before any smoothing.

    Points closer than half a resolution element repeat each other (zero filling) and would read too small a noise, so
    only every n-th point enters.
    """
    spacing = float((x_cm1[-1] - x_cm1[0]) / (len(x_cm1) - 1))
    stride = max(1, int(round(0.5 * resolution_cm1 / spacing)))
    width = params.noise_window_points
    x, a, ok = x_cm1[::stride], absorbance[::stride], valid[::stride]
    count = len(x) // width
    if count == 0:
        return []
    shape = (count, width)
    xs, ys, oks = (v[: count * width].reshape(shape) for v in (x, a, ok))
    u = np.linspace(-1, 1, width)
    basis, _ = np.linalg.qr(np.vander(u, 4))
    rest = ys - (ys @ basis) @ basis.T
    sd = np.sqrt((rest**2).sum(axis=1) / (width - 4))
    good = oks.all(axis=1) & (ys.max(axis=1) < params.unreliable_absorbance)
    return [(float(r[0]), float(r[-1]), float(s)) for r, s, g in zip(xs, sd, good, strict=True) if g]


def overall_noise(windows: list[tuple[float, float, float]], params: MethodParams) -> float:
    """The low percentile over the windows, scaled to what white noise would read; 0 where nothing could be measured."""
    if not windows:
        return 0.0
    spread = [sd for _, _, sd in windows]
    return float(np.percentile(spread, params.noise_percentile) / params.noise_percentile_ratio)


def fringes(
    x_cm1: np.ndarray, absorbance: np.ndarray, noise: float, params: MethodParams
) -> tuple[float, float] | None:
    """(period in cm-1, amplitude) of a sine that runs with one phase through two quiet regions, else None."""
    parts = [(x_cm1 > low) & (x_cm1 < high) for low, high in ((1850.0, 2270.0), (2400.0, 2750.0))]
    if any(part.sum() < 60 for part in parts):
        return None
    inside = parts[0] | parts[1]
    stride = max(1, int(inside.sum() // 300))
    x, y = x_cm1[inside][::stride], absorbance[inside][::stride]
    local = [np.where(part[inside][::stride], 1.0, 0.0) for part in parts]
    u = (x - x.mean()) / 450
    base = np.column_stack([flag * u**power for flag in local for power in range(3)])
    q, _ = np.linalg.qr(base)
    flat = y - q @ (q.T @ y)
    before = float(flat @ flat)
    if before <= 0:
        return None
    periods = np.geomspace(12.0, 160.0, 160)
    phases = 2 * np.pi * x[None, :] / periods[:, None]
    waves = np.stack([np.cos(phases), np.sin(phases)])
    waves = waves - (waves @ q) @ q.T
    cc, ss = (waves[0] ** 2).sum(axis=1), (waves[1] ** 2).sum(axis=1)
    cs = (waves[0] * waves[1]).sum(axis=1)
    yc, ys = waves[0] @ flat, waves[1] @ flat
    determinant = np.maximum(cc * ss - cs**2, 1e-12)
    a, b = (ss * yc - cs * ys) / determinant, (cc * ys - cs * yc) / determinant
    share = (a * yc + b * ys) / before
    top = int(np.argmax(share))
    explained, period, amplitude = float(share[top]), float(periods[top]), float(np.hypot(a[top], b[top]))
    if explained < params.fringe_explained or amplitude < params.fringe_signal_to_noise * max(noise, 1e-6):
        return None
    return period, amplitude


def range_findings(x_cm1: np.ndarray, params: MethodParams) -> list[Finding]:
    """What part of the mid-infrared is missing."""
    missing = []
    if x_cm1[0] > params.complete_range_low_cm1:
        missing.append(f"below {x_cm1[0]:.0f} cm-1")
    if x_cm1[-1] < params.complete_range_high_cm1:
        missing.append(f"above {x_cm1[-1]:.0f} cm-1")
    if not missing:
        return []
    return [
        Finding(
            "measurement.range",
            Severity.WARNING,
            f"Nothing was recorded {' or '.join(missing)}; groups that absorb there are not examined.",
            region_cm1=(float(x_cm1[0]), float(x_cm1[-1])),
            remedy="Measure the full range the procedure asks for.",
        )
    ]


def spacing_findings(spacing_cm1: float, resolution_cm1: float | None) -> list[Finding]:
    """Point spacing against the stated resolution."""
    if resolution_cm1 is None:
        return [
            Finding(
                "measurement.resolution_unknown",
                Severity.INFO,
                f"No resolution is stated; twice the point spacing ({2 * spacing_cm1:.3g} cm-1) is taken.",
                remedy="Enter the resolution with the spectrum.",
            )
        ]
    if spacing_cm1 > resolution_cm1 * 1.05:
        return [
            Finding(
                "measurement.coarse_spacing",
                Severity.WARNING,
                f"Points lie {spacing_cm1:.3g} cm-1 apart, wider than the stated resolution of "
                f"{resolution_cm1:.3g} cm-1; the data cannot show it.",
                remedy="Export without thinning the points.",
            )
        ]
    if spacing_cm1 < resolution_cm1 / 3:
        return [
            Finding(
                "measurement.zero_filled",
                Severity.INFO,
                f"Points lie {spacing_cm1:.3g} cm-1 apart at a resolution of {resolution_cm1:.3g} cm-1: "
                "neighbouring points are interpolated and carry no further detail.",
            )
        ]
    return []


def strength_findings(
    top_absorbance: float, top_cm1: float, noise: float, relative: bool, params: MethodParams
) -> list[Finding]:
    """Too weak, too noisy, or fit to read."""
    findings = []
    ratio = top_absorbance / noise if noise > 0 else float("inf")
    if not relative and top_absorbance < params.weak_absorbance:
        findings.append(
            Finding(
                "measurement.too_weak",
                Severity.WARNING,
                f"The strongest band reaches only {top_absorbance:.3f} absorbance at {top_cm1:.0f} cm-1; "
                "weak bands are lost.",
                region_cm1=(top_cm1 - 20, top_cm1 + 20),
                remedy="Use more material, a longer path or better contact.",
            )
        )
    if ratio < params.lowest_signal_to_noise:
        findings.append(
            Finding(
                "measurement.too_noisy",
                Severity.SERIOUS,
                f"The strongest band stands only {ratio:.0f} times above the noise of {noise:.2g}.",
                remedy="Add scans and check the light path before anything is concluded.",
            )
        )
    elif ratio < params.low_signal_to_noise:
        findings.append(
            Finding(
                "measurement.noisy",
                Severity.WARNING,
                f"The strongest band stands {ratio:.0f} times above the noise of {noise:.2g}; bands below "
                f"{100 * 6 / ratio:.0f} % of it cannot be told from noise.",
                remedy="Add scans.",
            )
        )
    return findings


def baseline_findings(x_cm1: np.ndarray, baseline: np.ndarray, params: MethodParams) -> list[Finding]:
    """Level, slope and range of the baseline."""
    span = float(baseline.max() - baseline.min())
    slope = float(np.polyfit(x_cm1, baseline, 1)[0]) * 1000
    if span <= params.steep_baseline_absorbance:
        return []
    return [
        Finding(
            "measurement.baseline",
            Severity.WARNING,
            f"The baseline moves over {span:.2f} absorbance (mean slope {slope:+.3f} per 1000 cm-1); "
            "areas and the heights of broad bands depend on how it is drawn.",
            region_cm1=(float(x_cm1[0]), float(x_cm1[-1])),
            remedy="Grind finer, press clearer or take a fresh background.",
        )
    ]


def atmosphere_findings(
    water: atmosphere.Residue | None, co2: atmosphere.Residue | None, phase: Phase | None, params: MethodParams
) -> list[Finding]:
    """Vapour and carbon dioxide in the light path, of either sign, with their index."""
    findings = []
    severity = Severity.INFO if phase is Phase.GAS else Severity.WARNING
    for code, name, residue, region in (
        ("measurement.water_vapour", "Water vapour", water, atmosphere.WATER_COMB_REGIONS_CM1[0]),
        ("measurement.carbon_dioxide", "Carbon dioxide", co2, atmosphere.CO2_REGION_CM1),
    ):
        if residue is None or residue.significance < params.vapour_significance:
            continue
        sign = "over-corrected" if residue.amplitude_absorbance < 0 else "not fully removed"
        findings.append(
            Finding(
                code,
                severity,
                f"{name} lines are in the spectrum ({sign}; amplitude {residue.amplitude_absorbance:+.4f} absorbance, "
                f"index {residue.significance:.1f}, lines are named from {params.vapour_significance:.1f}).",
                region_cm1=region,
                remedy="Purge longer and record background and sample under the same conditions.",
                facts={"index": residue.significance, "amplitude_absorbance": residue.amplitude_absorbance},
            )
        )
    return findings


def fringe_findings(found: tuple[float, float] | None, params: MethodParams) -> list[Finding]:
    """Interference fringes and the thickness they imply: d = 1 / (2 n period)."""
    if found is None:
        return []
    period, amplitude = found
    thickness_um = 1e4 / (2 * params.fringe_refractive_index * period)
    return [
        Finding(
            "measurement.fringes",
            Severity.WARNING,
            f"Interference fringes with a period of {period:.0f} cm-1 and an amplitude of {amplitude:.4f} "
            f"absorbance: a plane-parallel film of about {thickness_um:.0f} um at a refractive index of "
            f"{params.fringe_refractive_index:g}.",
            region_cm1=(1850.0, 2750.0),
            remedy="Roughen or tilt the film, or press it between windows.",
            facts={"period_cm1": period, "amplitude_absorbance": amplitude, "thickness_um": thickness_um},
        )
    ]
