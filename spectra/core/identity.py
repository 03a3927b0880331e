"""Is this the declared material? Band by band against its reference, with whole-curve figures beside, never alone.

Both spectra are lowered to one resolution and read on one grid; masked regions and carbon dioxide stay out. What cannot
be compared fairly (phase, technique, range, saturation, noise) is refused with its reasons before any figure is formed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from spectra.core import atmosphere
from spectra.core import bands as band_picking
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.preparation import degrade
from spectra.core.results import Band, BandDifference, Identity, Metric, Prepared
from spectra.core.types import Conditions, Finding, Phase, Technique, frozen_array

MASK_LIMIT_CM1 = 2000.0  # a saturated C-H stretch alone does not hinder a comparison

FORMULAS = {
    "signed_root_derivative": "Pearson r of sign(d) sqrt(|d|), d = dA/dnu",
    "correlation": "Pearson r of A",
    "derivative_correlation": "Pearson r of dA/dnu",
    "axis_shift_cm1": "shift of the reference axis that maximises the derivative correlation",
}


@dataclass(frozen=True)
class Pair:
    """Two spectra on one grid and one resolution. `usable` excludes masks and carbon dioxide; arrays of shape (n,)."""

    x_cm1: np.ndarray
    sample: np.ndarray
    reference: np.ndarray  # scaled to the sample
    usable: np.ndarray
    scale: float
    shift_cm1: float
    resolution_cm1: float


def cosine(a: np.ndarray, b: np.ndarray) -> float:
    """a.b / (|a| |b|). Raises CoreError for a vector without length."""
    size = float(np.linalg.norm(a) * np.linalg.norm(b))
    if size == 0:
        raise CoreError("score.flat", "A spectrum without any signal has no score.", remedy="Check the region.")
    return float(np.dot(a, b)) / size


def pearson(a: np.ndarray, b: np.ndarray) -> float:
    """Cosine of the mean-centred vectors. Raises CoreError where one of them is constant."""
    da, db = np.asarray(a) - np.mean(a), np.asarray(b) - np.mean(b)
    if np.linalg.norm(da) <= 1e-12 * max(1.0, np.linalg.norm(a)) or np.linalg.norm(db) <= 1e-12 * max(
        1.0, np.linalg.norm(b)
    ):
        raise CoreError("score.flat", "A constant spectrum has no correlation.", remedy="Check the region.")
    return cosine(da, db)


def derivative_correlation(a: np.ndarray, b: np.ndarray) -> float:
    """Pearson r of first differences."""
    return pearson(np.diff(a), np.diff(b))


def euclidean_of_units(a: np.ndarray, b: np.ndarray) -> float:
    """sqrt(2 - 2 cosine): 0 for equal shapes, sqrt(2) for orthogonal ones."""
    return math.sqrt(max(0.0, 2 - 2 * cosine(a, b)))


def spectral_angle_deg(a: np.ndarray, b: np.ndarray) -> float:
    """arccos(cosine) in degrees."""
    return math.degrees(math.acos(max(-1.0, min(1.0, cosine(a, b)))))


def signed_root(values: np.ndarray) -> np.ndarray:
    """sign(v) sqrt(|v|): lets weak bands speak beside strong ones."""
    return np.sign(values) * np.sqrt(np.abs(values))


def incomparable(first: Conditions, second: Conditions) -> list[str]:
    """Reasons in words why two sets of conditions cannot be compared; empty when nothing speaks against it."""
    reasons = []
    if first.phase is not None and second.phase is not None and not _same_phase(first.phase, second.phase):
        reasons.append(f"The phases differ ({first.phase.value} against {second.phase.value}).")
    if first.technique is not None and second.technique is not None and first.technique is not second.technique:
        reasons.append(f"The techniques differ ({first.technique.value} against {second.technique.value}).")
    return reasons


def _same_phase(first: Phase, second: Phase) -> bool:
    # A film may be cast from a solid or spread from a liquid; every other change of phase moves bands.
    return first is second or (
        Phase.FILM in (first, second) and {first, second} <= {Phase.FILM, Phase.SOLID, Phase.LIQUID}
    )


def pair_up(sample: Prepared, reference: Prepared, params: MethodParams, least_resolution_cm1: float) -> Pair:
    """Both on the sample's grid (or the coarser of the two) at one resolution, axis shift removed, reference scaled.

    Raises CoreError `identity.no_overlap` when fewer than 100 usable points are common.
    """
    step = max(sample.step_cm1, reference.step_cm1)
    low = max(sample.x_cm1[0], reference.x_cm1[0])
    high = min(sample.x_cm1[-1], reference.x_cm1[-1])
    if high - low < 100 * step:
        raise CoreError(
            "identity.no_overlap",
            "The two spectra have no common range worth comparing.",
            remedy="Measure both over the same range.",
        )
    resolution = max(least_resolution_cm1, sample.resolution_cm1, reference.resolution_cm1)
    grid = low + step * np.arange(int((high - low) / step) + 1)
    own, other = _lowered(sample, resolution), _lowered(reference, resolution)
    a = np.interp(grid, sample.x_cm1, own)
    usable = np.interp(grid, sample.x_cm1, sample.usable.astype(float)) > 0.999
    usable &= np.interp(grid, reference.x_cm1, reference.usable.astype(float)) > 0.999
    usable &= ~((grid > atmosphere.CO2_REGION_CM1[0]) & (grid < atmosphere.CO2_REGION_CM1[1]))
    edge = resolution
    usable &= (grid > low + edge) & (grid < high - edge)
    if usable.sum() < 100:
        raise CoreError(
            "identity.no_overlap",
            "Too little of the two spectra can be read in both.",
            remedy="Measure a thinner specimen over the full range.",
        )
    shift = _best_shift(grid, a, reference.x_cm1, other, usable, params.identity_shift_cm1)
    b = np.interp(grid - shift, reference.x_cm1, other)
    weight = a[usable] @ b[usable] / max(float(b[usable] @ b[usable]), 1e-30)
    scale = max(float(weight), 1e-12)
    return Pair(frozen_array(grid), frozen_array(a), frozen_array(scale * b), usable, scale, shift, resolution)


def _lowered(prepared: Prepared, resolution: float) -> np.ndarray:
    present = prepared.resolution_cm1 * math.sqrt(2)  # instrument and smoothing together
    return degrade(prepared.smooth, prepared.step_cm1, present, max(resolution, present))


def _best_shift(
    grid: np.ndarray, a: np.ndarray, x: np.ndarray, b: np.ndarray, usable: np.ndarray, most: float
) -> float:
    da = np.diff(a)
    keep = usable[:-1] & usable[1:]
    best, best_score = 0.0, -2.0
    for shift in np.arange(-most, most + 0.01, 0.5):
        db = np.diff(np.interp(grid - shift, x, b))
        size = float(np.linalg.norm(da[keep]) * np.linalg.norm(db[keep]))
        score = float(da[keep] @ db[keep]) / size if size > 0 else -1.0
        if score > best_score + 1e-9:
            best, best_score = float(shift), score
    return best


def metrics_of(pair: Pair, params: MethodParams) -> tuple[Metric, ...]:
    """Whole-curve figures, the first of them below the fingerprint limit only."""
    limit = params.fingerprint_limit_cm1
    treatment = f"baseline removed, {pair.resolution_cm1:g} cm-1, masks and carbon dioxide left out"
    result = []
    for name, low, high in (
        ("signed_root_derivative", 0.0, limit),
        ("correlation", 0.0, limit),
        ("derivative_correlation", 0.0, 9999.0),
        ("correlation", 0.0, 9999.0),
    ):
        inside = pair.usable & (pair.x_cm1 >= low) & (pair.x_cm1 <= high)
        if inside.sum() < 40:
            continue
        region = (float(pair.x_cm1[inside][0]), float(pair.x_cm1[inside][-1]))
        a, b = pair.sample, pair.reference
        if name != "correlation":
            a, b = np.gradient(a, pair.x_cm1), np.gradient(b, pair.x_cm1)
        if name == "signed_root_derivative":
            a, b = signed_root(a), signed_root(b)
        try:
            value = pearson(a[inside], b[inside])
        except CoreError:
            continue
        label = f"{name}_{'fingerprint' if high == limit else 'whole'}"
        result.append(Metric(label, value, FORMULAS[name], region, treatment))
    result.append(
        Metric(
            "axis_shift_cm1",
            pair.shift_cm1,
            FORMULAS["axis_shift_cm1"],
            (float(pair.x_cm1[0]), float(pair.x_cm1[-1])),
            treatment,
        )
    )
    return tuple(result)


def main_score(metrics: tuple[Metric, ...]) -> float | None:
    """The figure that takes part in the verdict: signed-root derivative below the fingerprint limit."""
    return next((m.value for m in metrics if m.name == "signed_root_derivative_fingerprint"), None)


def compare(
    sample: Prepared,
    sample_conditions: Conditions,
    reference: Prepared,
    reference_conditions: Conditions,
    reference_name: str,
    params: MethodParams,
) -> tuple[Identity, Pair | None]:
    """Verdict on identity with its ledger; the pair is None where nothing could be laid over one another."""
    reasons = incomparable(sample_conditions, reference_conditions)
    reasons += _unfit(sample, "sample") + _unfit(reference, "reference")
    try:
        pair = pair_up(sample, reference, params, params.identity_resolution_cm1)
    except CoreError as error:
        return _refused([*reasons, str(error)], reference_name), None
    limit = params.fingerprint_limit_cm1
    fingerprint = (pair.x_cm1 >= 700) & (pair.x_cm1 <= limit)
    covered = float(pair.usable[fingerprint].sum()) * (pair.x_cm1[1] - pair.x_cm1[0]) / (limit - 700)
    if covered < 1 - params.identity_masked_share:
        reasons.append(
            f"Only {100 * min(covered, 1):.0f} % of the fingerprint region can be read in both "
            f"(range and saturation); {100 * (1 - params.identity_masked_share):.0f} % are needed."
        )
    metrics = metrics_of(pair, params)
    score = main_score(metrics)
    if score is None:
        reasons.append("The fingerprint region cannot be scored.")
    if reasons:
        return replace(_refused(reasons, reference_name), metrics=metrics), pair
    tally = _concordance(sample, reference, pair, params)
    if tally.masked_weight > params.identity_masked_share:
        refused = _refused(
            [
                f"Total absorption hides {100 * tally.masked_weight:.0f} % of the reference's band heights below "
                f"{MASK_LIMIT_CM1:.0f} cm-1."
            ],
            reference_name,
        )
        return replace(refused, metrics=metrics), pair
    return _verdict(tally, metrics, float(score), reference_name, sample_conditions, reference_conditions, params), pair


def _next_steps(conditions: Conditions) -> tuple[str, ...]:
    """What would settle a difference. Only solids have crystal forms that a common solvent could make equal."""
    beside = "Measure today's reference beside the sample on the same instrument."
    if conditions.phase is Phase.SOLID or conditions.technique in (Technique.DISC, Technique.MULL, Technique.DIFFUSE):
        return ("Repeat sample and reference from the same solvent, prepared in the same way.", beside)
    return (
        "Compare the label with the container that was sampled.",
        "Measure the other containers of the delivery.",
        "Repeat with a fresh preparation.",
        beside,
    )


def _unfit(prepared: Prepared, which: str) -> list[str]:
    reasons = []
    if any(f.code == "measurement.too_noisy" for f in prepared.findings):
        reasons.append(f"The {which} is too noisy.")
    return reasons


def _refused(reasons: list[str], name: str) -> Identity:
    return Identity(
        "cannot_be_compared",
        "neutral",
        name,
        "cannot be weighed",
        (),
        tuple(reasons),
        ("Measure the sample and an approved reference in the same way.",),
        (),
        0,
        (),
        (),
        (),
    )


@dataclass(frozen=True)
class _Tally:
    demanded: int
    found: int
    missing: tuple[BandDifference, ...]
    extra: tuple[BandDifference, ...]
    outliers: tuple[BandDifference, ...]
    large_missing: int
    large_extra: int
    found_weight: float  # found share of the demanded bands, each weighted by its height
    extra_weight: float  # height of the extra bands as a share of all the sample's
    masked_weight: float  # height of the reference's bands below MASK_LIMIT_CM1 that masks keep from being compared


def _concordance(sample: Prepared, reference: Prepared, pair: Pair, params: MethodParams) -> _Tally:
    """Reference bands looked for in the sample and the other way round, on the common resolution."""
    own = _bands_on(pair, pair.sample, sample, params)
    other = _bands_on(pair, pair.reference, reference, params)
    own_top = max((b.height_absorbance for b in own if not _beside_a_mask(b, pair, params)), default=0.0)
    other_top = max((b.height_absorbance for b in other if not _beside_a_mask(b, pair, params)), default=0.0)
    noise = float(np.median(sample.noise))
    noise_reference = float(np.median(reference.noise)) * pair.scale
    missing, ratios = [], []
    demanded = found = large_missing = 0
    demanded_height = found_height = masked_height = low_height = 0.0
    for band in other:
        if (
            band.kind == "shoulder"
            or band.height_absorbance < params.identity_band_level * other_top
            or band.prominence_absorbance < 10 * max(noise, noise_reference)
            or band.prominence_absorbance < 0.25 * params.identity_band_level * other_top
        ):
            continue
        if _beside_a_mask(band, pair, params):
            masked_height += band.height_absorbance if band.position_cm1 < MASK_LIMIT_CM1 else 0.0
            continue
        low_height += band.height_absorbance if band.position_cm1 < MASK_LIMIT_CM1 else 0.0
        demanded += 1
        demanded_height += band.height_absorbance
        match = _match(band, own, params)
        if match is None:
            missing.append(
                BandDifference(
                    band.position_cm1, band.height_absorbance, snr=band.height_absorbance / max(noise, 1e-12)
                )
            )
            large_missing += band.height_absorbance >= params.medium_level * other_top
            continue
        found += 1
        found_height += band.height_absorbance
        if match.kind != "shoulder":
            ratios.append((band, match, match.height_absorbance / max(band.height_absorbance, 1e-12)))
    extra = []
    large_extra = 0
    own_height = extra_height = 0.0
    for band in own:
        if (
            band.kind == "shoulder"
            or band.height_absorbance < params.identity_extra_level * own_top
            or band.prominence_absorbance
            < max(10 * max(noise, noise_reference), 0.5 * params.identity_extra_level * own_top)
        ):
            continue
        if _beside_a_mask(band, pair, params):
            continue
        own_height += band.height_absorbance
        if _match(band, other, params) is None:
            extra_height += band.height_absorbance
            extra.append(BandDifference(band.position_cm1, band.height_absorbance, snr=band.snr))
            large_extra += band.height_absorbance >= params.medium_level * own_top
    outliers = []
    if ratios:
        middle = float(np.median([ratio for _, _, ratio in ratios]))
        for band, match, ratio in ratios:
            relative = ratio / max(middle, 1e-12)
            if band.height_absorbance >= 0.1 * other_top and not (
                1 / params.identity_size_ratio <= relative <= params.identity_size_ratio
            ):
                outliers.append(
                    BandDifference(match.position_cm1, match.height_absorbance, snr=match.snr, ratio=relative)
                )
    return _Tally(
        demanded,
        found,
        tuple(missing),
        tuple(extra),
        tuple(outliers),
        large_missing,
        large_extra,
        found_height / demanded_height if demanded_height > 0 else 0.0,
        extra_height / own_height if own_height > 0 else 0.0,
        masked_height / (masked_height + low_height) if masked_height > 0 else 0.0,
    )


def _beside_a_mask(band: Band, pair: Pair, params: MethodParams) -> bool:
    """A band whose window touches a region that cannot be read in both spectra is neither demanded nor held against."""
    window = params.identity_window_cm1 + pair.resolution_cm1
    near = np.abs(pair.x_cm1 - band.position_cm1) <= window
    return not bool(pair.usable[near].all())


def _bands_on(pair: Pair, trace: np.ndarray, origin: Prepared, params: MethodParams) -> tuple[Band, ...]:
    scale = pair.scale if trace is pair.reference else 1.0
    # Bands under a mask are picked, too: they are set aside by name further on instead of vanishing.
    everywhere = np.ones(len(pair.x_cm1), dtype=bool)
    view = replace(
        origin,
        x_cm1=pair.x_cm1,
        smooth=trace,
        corrected=trace,
        usable=everywhere,
        unreliable=~pair.usable,
        masks=(),
        noise=np.interp(pair.x_cm1, origin.x_cm1, origin.noise) * scale,
        resolution_cm1=pair.resolution_cm1,
        findings=_atmosphere_only(origin.findings),
    )
    return band_picking.pick(view, params)


def _atmosphere_only(findings: tuple[Finding, ...]) -> tuple[Finding, ...]:
    return tuple(f for f in findings if f.code in ("measurement.water_vapour", "measurement.carbon_dioxide"))


def _match(band: Band, others: tuple[Band, ...], params: MethodParams) -> Band | None:
    window = params.identity_window_cm1 + params.identity_wide_window_share * band.fwhm_cm1
    near = [b for b in others if abs(b.position_cm1 - band.position_cm1) <= window]
    if not near:
        return None
    return min(near, key=lambda b: (b.kind == "shoulder", abs(b.position_cm1 - band.position_cm1)))


def _verdict(
    tally: _Tally,
    metrics: tuple[Metric, ...],
    score: float,
    name: str,
    sample_conditions: Conditions,
    reference_conditions: Conditions,
    params: MethodParams,
) -> Identity:
    share = tally.found / tally.demanded if tally.demanded else 0.0
    for_, against = [], []
    for_.append(
        f"{tally.found} of {tally.demanded} reference bands are in the sample, within "
        f"{params.identity_window_cm1:g} cm-1 and a share of their width."
    )
    limit = params.fingerprint_limit_cm1
    line = (
        f"Signed-root derivative correlation below {limit:.0f} cm-1 is {score:.3f} "
        f"(consistent from {params.identity_consistent_score:.2f})."
    )
    (for_ if score >= params.identity_consistent_score else against).append(line)
    for what, items in (("Missing", tally.missing), ("Extra", tally.extra), ("Size differs", tally.outliers)):
        if items:
            places = ", ".join(f"{d.position_cm1:.0f}" for d in items[:8])
            against.append(f"{what} at {places} cm-1.")
    for which, conditions in (("sample", sample_conditions), ("reference", reference_conditions)):
        if conditions.phase is None:
            against.append(f"The phase of the {which} is not recorded, so it could not be checked.")
    differences = len(tally.missing) + len(tally.extra) + len(tally.outliers)
    if tally.demanded == 0:
        return _refused(["The reference shows no band above noise and size limits."], name)
    if (
        score >= params.identity_consistent_score
        and share >= params.identity_found_share
        and tally.large_missing == 0
        and tally.large_extra == 0
        and not tally.extra
        and len(tally.outliers) <= max(1, tally.demanded // 10)
    ):
        verdict, agrees, weight = "consistent", "yes", "strong" if differences == 0 else "good"
    elif (
        score >= params.identity_different_score
        and tally.found_weight >= params.identity_found_weight
        and tally.extra_weight <= 1 - params.identity_found_weight
    ):
        verdict, agrees, weight = "consistent_with_differences", "neutral", "open"
    else:
        verdict, agrees = "not_consistent", "no"
        weight = "strong" if score < 0.4 else "good"
    would = () if verdict == "consistent" else _next_steps(sample_conditions)
    return Identity(
        verdict,
        agrees,
        name,
        weight,
        tuple(for_),
        tuple(against),
        would,
        metrics,
        tally.demanded,
        tally.missing,
        tally.extra,
        tally.outliers,
    )
