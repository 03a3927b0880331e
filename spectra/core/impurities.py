"""What the declared reference leaves over: watch-list components with uncertainty and limits, and unexplained bands.

The sample is fitted with the reference and everything that may differ between two measurements of one material: a
baseline, shift and width (derivatives of the reference), and intensity tilt and curvature (reference times wavenumber,
reference squared). A component is judged by what it adds outside that space. Decision and detection limit are kept
apart (Currie 1968): the first decides, the second says what would hardly be missed.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from spectra.core import atmosphere
from spectra.core.errors import CoreError
from spectra.core.identity import Pair, incomparable, pair_up
from spectra.core.params import MethodParams
from spectra.core.preparation import degrade, gaussian_smooth
from spectra.core.results import Impurities, Prepared, Screened, Unexplained
from spectra.core.types import Conditions

SCALE = "fraction of peak height"
ROBUST_ROUNDS = 6
ROBUST_LIMIT = 2.5  # standard deviations above the fit from which a point loses weight
ONE_SIDED_95 = 1.6448536269514722
NEGATIVE_WIDENED_Z = 2.0  # an estimate further below zero than this says that its uncertainty is too small
NEGATIVE_REFUSED_Z = 4.0  # and further than this, that the fit does not hold for this component
LARGEST_OVERSHOOT = 1.5  # of the sample's own height, up to which a residual band is cut to it instead of dropped
SCALE_BAND_SHARE = 0.9  # a band of this share of the strongest one's height can stand in for it


@dataclass(frozen=True)
class Candidate:
    """One watch-list component, prepared."""

    name: str
    prepared: Prepared
    conditions: Conditions


@dataclass(frozen=True)
class CurrieLimits:
    """Decision limit, detection limit and determination limit in units of the standard deviation given."""

    decision: float
    detection: float
    determination: float


def currie_limits(sigma: float, false_alarm_z: float = ONE_SIDED_95, missed_z: float = ONE_SIDED_95) -> CurrieLimits:
    """L_C = z_alpha sigma, L_D = L_C + z_beta sigma, L_Q = 10 sigma (Currie 1968; IUPAC 1995), sigma >= 0."""
    return CurrieLimits(false_alarm_z * sigma, (false_alarm_z + missed_z) * sigma, 10 * sigma)


def nonnegative_fit(columns: np.ndarray, values: np.ndarray) -> tuple[np.ndarray, float]:
    """Non-negative least squares (Lawson and Hanson 1974): coefficients (k,) and the norm of what is left."""
    from scipy.optimize import nnls

    solution, rest = nnls(np.asarray(columns, dtype=np.float64), np.asarray(values, dtype=np.float64))
    return solution, float(rest)


def extra_sum_of_squares(first: np.ndarray, second: np.ndarray, values: np.ndarray) -> tuple[float, float]:
    """(F, p) for adding the columns of `second` that `first` lacks; independent points are assumed."""
    from scipy.stats import f as f_distribution

    def left(columns: np.ndarray) -> float:
        rest = values - columns @ np.linalg.lstsq(columns, values, rcond=None)[0]
        return float(rest @ rest)

    s1, s2 = left(first), left(second)
    added, freedom = second.shape[1] - first.shape[1], len(values) - second.shape[1]
    value = ((s1 - s2) / added) / (s2 / freedom)
    return value, float(f_distribution.sf(value, added, freedom))


def correlation_length(residual: np.ndarray, most: int) -> float:
    """1 + 2 sum of the autocorrelation up to its first negative value: how many points carry one independent value."""
    centred = residual - residual.mean()
    power = float(centred @ centred)
    if power <= 0:
        return 1.0
    total = 1.0
    for lag in range(1, min(most, len(centred) - 1)):
        value = float(centred[:-lag] @ centred[lag:]) / power
        if value <= 0.0:
            break
        total += 2 * value
    return total


def screen(
    sample: Prepared,
    sample_conditions: Conditions,
    reference: Prepared,
    reference_conditions: Conditions,
    watch: tuple[Candidate, ...],
    params: MethodParams,
) -> tuple[Impurities | None, tuple[Pair, np.ndarray] | None]:
    """Screening of one sample; also the pair and the residual on its grid (NaN where masked) for the plot.

    The result is None when the two spectra have no common range. Conditions that cannot be compared, or a reference
    that does not explain the sample, refuse every claim and say why.
    """
    reasons = incomparable(sample_conditions, reference_conditions)
    try:
        pair = pair_up(sample, reference, params, max(sample.resolution_cm1, reference.resolution_cm1))
    except CoreError:
        return None, None
    fit = _Fit.of(sample, reference, pair, params)
    notes: list[str] = list(reasons)
    scale_hidden, scale_note = _scale(sample, reference, pair, fit)
    notes += [scale_note] if scale_note else []
    doubtful = fit.explained_variance < params.explained_variance
    if fit.explained_variance < params.explained_variance:
        notes.append(
            f"The reference explains {100 * fit.explained_variance:.1f} % of the sample, less than "
            f"{100 * params.explained_variance:.0f} %: the declared material itself is in doubt, or another "
            "component dominates; no impurity is named, and bands left over may belong to the material itself."
        )
    judged = [_prepare_candidate(item, sample_conditions, pair, fit, params) for item in watch]
    solved = _solve(fit, [j for j in judged if j.column is not None], params)
    smallest = _smallest_claim(solved.structured_fraction, params)
    if smallest > params.impurity_floor_fraction:
        notes.append(
            f"After the fit {100 * solved.structured_fraction:.2f} % of the peak height is left over with "
            f"structure, as between two instruments; nothing below {100 * smallest:.0f} % is claimed."
        )
    notes.append(
        "Screening reaches roughly per cent to tenths of a per cent; it shows neither purity nor the absence of "
        "trace substances."
    )
    refused = " ".join(notes[:-1]) if reasons or doubtful or scale_hidden else ""
    screened = tuple(_judge(item, solved, smallest, refused, params) for item in judged)
    unexplained = () if reasons else _unexplained(fit, solved, smallest, params)
    residual = np.where(pair.usable, solved.residual_full, np.nan)
    return Impurities(
        screened,
        unexplained,
        fit.explained_variance,
        solved.structured_fraction,
        None if refused else smallest,
        tuple(notes),
    ), (pair, residual)


def _scale(sample: Prepared, reference: Prepared, pair: Pair, fit: _Fit) -> tuple[bool, str]:
    """Whether total absorption hides the band that fractions are counted from, and the sentence about the scale."""
    x, reach = pair.x_cm1, pair.resolution_cm1
    dark = np.zeros(len(x), dtype=bool)
    for mask in (*sample.masks, *reference.masks):
        dark |= (x >= mask.low_cm1 - reach) & (x <= mask.high_cm1 + reach)
    material = np.where(fit.rows | dark, pair.reference, 0.0)
    strongest = int(np.argmax(material))
    if fit.rows[strongest]:
        return False, ""
    readable = np.where(fit.rows, material, 0.0)
    stand_in = int(np.argmax(readable))
    if readable[stand_in] >= SCALE_BAND_SHARE * material[strongest]:
        return False, (
            f"The strongest band of the material (near {x[strongest]:.0f} cm-1) is totally absorbed; fractions are "
            f"counted from the band at {x[stand_in]:.0f} cm-1, which can be read."
        )
    return True, (
        f"The strongest band of the material (near {x[strongest]:.0f} cm-1) is totally absorbed in the sample or in "
        "its reference, so the height that fractions are counted from is unknown: measure a thinner or more dilute "
        "specimen."
    )


@dataclass
class _Fit:
    """The nuisance space of one pair. Rows are weighted by the local standard deviation; only usable points."""

    pair: Pair
    rows: np.ndarray
    sigma: np.ndarray
    basis: np.ndarray  # orthonormal, weighted
    design: np.ndarray
    values: np.ndarray  # weighted sample
    peak: float  # height of the fitted material's strongest band
    explained_variance: float
    noise_fraction: float

    @classmethod
    def of(cls, sample: Prepared, reference: Prepared, pair: Pair, params: MethodParams) -> _Fit:
        x = pair.x_cm1
        step = float(x[1] - x[0])
        material = pair.reference
        rows = pair.usable
        u = (x - x.mean()) / (0.5 * (x[-1] - x[0]))
        polynomials = np.polynomial.chebyshev.chebvander(u, params.impurity_baseline_degree)
        first = np.gradient(material, step)
        second = np.gradient(first, step)
        third = np.gradient(second, step)
        fourth = np.gradient(third, step)
        columns = np.column_stack(
            [polynomials, material, first, second, third, fourth, material * u, material * u**2, material**2]
        )
        noise = np.maximum(np.interp(x, sample.x_cm1, sample.noise), 1e-9)
        noise = np.hypot(noise, np.interp(x, reference.x_cm1, reference.noise) * pair.scale)
        # Reproducibility of height and position, in proportion to the material's own signal and slope.
        share = params.multiplicative_noise
        sigma = np.sqrt(noise**2 + (share * material) ** 2 + (share * pair.resolution_cm1 * first) ** 2)
        weighted = columns[rows] / sigma[rows, None]
        norms = np.linalg.norm(weighted, axis=0)
        keep = norms > 1e-9 * norms.max()
        basis, upper = np.linalg.qr(weighted[:, keep] / norms[keep])
        independent = np.abs(np.diag(upper)) > 1e-7
        basis = basis[:, independent]
        values = pair.sample[rows] / sigma[rows]
        # How much of the sample's own structure the material explains: unweighted, after a baseline.
        plain_base, _ = np.linalg.qr(polynomials[rows])
        y = pair.sample[rows]
        flat = y - plain_base @ (plain_base.T @ y)
        full = columns[rows] / np.maximum(np.linalg.norm(columns[rows], axis=0), 1e-30)
        solution = np.linalg.lstsq(full, y, rcond=1e-9)[0]
        rest = y - full @ solution
        explained = 1 - float(rest @ rest) / max(float(flat @ flat), 1e-30)
        peak = float(material[rows].max())
        return cls(
            pair,
            rows,
            sigma,
            basis,
            columns,
            values,
            max(peak, 1e-12),
            explained,
            float(np.median(noise)) / max(peak, 1e-12),
        )

    def outside(self, weighted: np.ndarray) -> np.ndarray:
        """The part of weighted columns or values that the nuisance space cannot make."""
        return weighted - self.basis @ (self.basis.T @ weighted)


@dataclass
class _Judged:
    candidate: Candidate
    column: np.ndarray | None  # weighted, outside the nuisance space, for one peak height of the material
    shape: np.ndarray | None  # the component on the pair's grid, peak 1
    seen: float
    reason: str = ""


def _prepare_candidate(
    item: Candidate, sample_conditions: Conditions, pair: Pair, fit: _Fit, params: MethodParams
) -> _Judged:
    reasons = incomparable(sample_conditions, item.conditions)
    x = pair.x_cm1
    source = item.prepared
    if source.x_cm1[-1] < x[0] + 50 or source.x_cm1[0] > x[-1] - 50:
        return _Judged(item, None, None, 0.0, "Its reference was not recorded in this range.")
    present = source.resolution_cm1 * math.sqrt(2)  # instrument and smoothing together, as in the pair
    trace = degrade(source.smooth, source.step_cm1, present, max(pair.resolution_cm1, present))
    shape = np.interp(x, source.x_cm1, trace, left=0.0, right=0.0)
    top = float(np.where(np.interp(source.x_cm1, source.x_cm1, source.usable) > 0.5, trace, 0).max())
    if top <= 0:
        return _Judged(item, None, None, 0.0, "Its reference shows no band.")
    shape = shape / top
    total = float(np.trapezoid((trace / top) ** 2, source.x_cm1))
    seen = float((shape[fit.rows] ** 2).sum() * (x[1] - x[0])) / max(total, 1e-30)
    if reasons:
        return _Judged(item, None, shape, seen, " ".join(reasons))
    if seen < 0.2:
        return _Judged(
            item,
            None,
            shape,
            seen,
            f"Only {100 * seen:.0f} % of its signal lies where this spectrum can be "
            "read (range, saturation, carbon dioxide).",
        )
    column = fit.outside(shape[fit.rows] / fit.sigma[fit.rows]) * fit.peak
    return _Judged(item, column, shape, seen)


@dataclass
class _Solved:
    estimates: dict[str, float]
    sigmas: dict[str, float]
    residual: np.ndarray  # weighted, usable points
    residual_full: np.ndarray  # absorbance on the pair's grid
    spread: float
    length: float
    structured_fraction: float


def _solve(fit: _Fit, judged: list[_Judged], params: MethodParams) -> _Solved:
    """One by one against the residual, then jointly without negative amounts; uncertainty from what is left."""
    rest = fit.outside(fit.values)
    step = float(fit.pair.x_cm1[1] - fit.pair.x_cm1[0])
    reach = int(max(4.0, 60.0 / step))
    estimates: dict[str, float] = {}
    sigmas: dict[str, float] = {}
    matrix = np.column_stack([j.column for j in judged]) if judged else np.zeros((len(rest), 0))
    chosen = np.zeros(matrix.shape[1])
    if matrix.shape[1]:
        chosen, _ = nonnegative_fit(matrix, rest)
    left = rest - matrix @ chosen
    freedom = max(len(left) - fit.basis.shape[1] - int((chosen > 0).sum()), 1)
    spread = math.sqrt(float(left @ left) / freedom)
    length = correlation_length(left, reach)
    active = [k for k in range(len(judged)) if chosen[k] > 0]
    for k, item in enumerate(judged):
        others = [a for a in active if a != k]
        column = matrix[:, k]
        if others:
            q, _ = np.linalg.qr(matrix[:, others])
            column = column - q @ (q.T @ column)
        norm = float(np.linalg.norm(column))
        name = item.candidate.name
        free = float(column @ rest) / max(norm**2, 1e-30)
        sigmas[name] = max(spread, 1.0) * math.sqrt(length) / max(norm, 1e-12)
        estimates[name] = free
    design = fit.design / np.maximum(np.linalg.norm(fit.design, axis=0), 1e-30)
    shapes = [j.shape * fit.peak for j, c in zip(judged, chosen, strict=True) if c > 0]
    amounts = [c for c in chosen if c > 0]
    removed = fit.pair.sample - (np.column_stack(shapes) @ np.array(amounts) if shapes else 0.0)
    residual_full = removed - design @ _one_sided_fit(design[fit.rows], removed[fit.rows], fit.sigma[fit.rows])
    plain = residual_full[fit.rows]
    structured = (
        math.sqrt(max(float(plain @ plain) / len(plain) - (fit.noise_fraction * fit.peak) ** 2, 0.0)) / fit.peak
    )
    return _Solved(estimates, sigmas, left, residual_full, spread, length, structured)


def _one_sided_fit(design: np.ndarray, values: np.ndarray, sigma: np.ndarray) -> np.ndarray:
    """Least squares in which points far above the fit lose weight, so that a foreign band does not bend the material.

    Only upwards: a contaminant adds absorbance. Six rounds; the scale is the median absolute deviation of each round.
    """
    weights = 1 / sigma
    solution = np.zeros(design.shape[1])
    for _ in range(ROBUST_ROUNDS):
        solution = np.linalg.lstsq(design * weights[:, None], values * weights, rcond=1e-9)[0]
        ratio = (values - design @ solution) / sigma
        scale = max(_robust(ratio), 1.0)
        excess = np.maximum(ratio / (ROBUST_LIMIT * scale), 1.0)
        weights = 1 / (sigma * excess**2)
    return solution


def _smallest_claim(structured_fraction: float, params: MethodParams) -> float:
    """The least fraction that may be claimed, by what the fit leaves over in units of the peak height."""
    if structured_fraction > params.repeat_residual_large:
        return params.limit_large_residual
    if structured_fraction > params.repeat_residual_small:
        return params.limit_medium_residual
    return params.impurity_floor_fraction


def _judge(item: _Judged, solved: _Solved, smallest: float, refused: str, params: MethodParams) -> Screened:
    name = item.candidate.name

    def unseen(reason: str) -> Screened:
        return Screened(
            name,
            "cannot_be_seen",
            "neutral",
            None,
            None,
            None,
            None,
            None,
            SCALE,
            "cannot be weighed",
            (),
            (reason,),
            ("A method made for this component, such as chromatography.",),
        )

    if item.column is None:
        return unseen(item.reason)
    if refused:
        return unseen(refused)
    estimate, sigma = solved.estimates[name], solved.sigmas[name]
    z = estimate / sigma
    if z <= -NEGATIVE_REFUSED_Z:
        return unseen(
            f"The fit gives a negative amount ({100 * estimate:.2f} % of the peak height, {-z:.1f} standard "
            "uncertainties below zero): sample and reference differ in a way that the fit does not know, and no "
            "absence can be read from it."
        )
    widened = ""
    if z < -NEGATIVE_WIDENED_Z:
        widened = (
            f"The estimate lies {-z:.1f} standard uncertainties of {100 * sigma:.2f} % below zero, where no amount "
            "can lie; uncertainty and limits are widened accordingly."
        )
        sigma = -estimate / NEGATIVE_WIDENED_Z
    limits = currie_limits(sigma, params.impurity_significance)
    decision = max(limits.decision, smallest)
    detection = max(limits.detection, smallest + ONE_SIDED_95 * sigma)
    if detection > params.masked_detection_limit:
        return unseen(
            f"Its signal disappears under this material: it would be seen only from {100 * detection:.0f} % of "
            "the peak height upwards."
        )
    z = estimate / sigma
    facts = (
        f"Estimate {100 * estimate:.2f} % of the peak height, standard uncertainty {100 * sigma:.2f} %, "
        f"{z:.1f} times its uncertainty."
    )
    bounds = (
        f"Decision limit {100 * decision:.2f} %, detection limit {100 * detection:.2f} % of the peak height in this "
        "spectrum."
    )
    if estimate > decision:
        return Screened(
            name,
            "found",
            "no",
            estimate,
            sigma,
            z,
            decision,
            detection,
            SCALE,
            "strong" if z > 2 * params.impurity_significance else "good",
            (facts, bounds),
            (),
            ("A method made for this component, such as chromatography.",),
        )
    return Screened(
        name,
        "not_found_above_limit",
        "yes",
        estimate,
        sigma,
        z,
        decision,
        detection,
        SCALE,
        "good",
        (),
        (*([widened] if widened else []), facts, bounds),
        (),
    )


def _unexplained(fit: _Fit, solved: _Solved, smallest: float, params: MethodParams) -> tuple[Unexplained, ...]:
    """Positive residual bands that stand out of the local uncertainty and of the smallest claim.

    What is left over can never be more than the sample itself absorbs at that place: a little more is cut to it, much
    more is the fit's own doing, where the reference had to be taken negatively, and no band.
    """
    from scipy.signal import find_peaks

    x = fit.pair.x_cm1
    step = float(x[1] - x[0])
    trace = gaussian_smooth(np.where(fit.rows, solved.residual_full, 0.0), step, fit.pair.resolution_cm1)
    ratio = solved.residual_full[fit.rows] / fit.sigma[fit.rows]
    local = fit.sigma * max(1.0, _robust(ratio))
    floor = max(params.unexplained_floor_fraction, 0.05 * smallest) * fit.peak
    peaks, facts = find_peaks(trace, prominence=floor * 0.5)
    result = []
    quiet = np.convolve(~fit.rows, np.ones(2 * int(fit.pair.resolution_cm1 / step) + 1), mode="same") > 0
    for index, prominence in zip(peaks, facts["prominences"], strict=True):
        own = float(fit.pair.sample[index])
        if trace[index] > LARGEST_OVERSHOOT * own:
            continue
        height = min(float(trace[index]), own)
        ratio = min(height, float(prominence)) / float(local[index])
        inside_co2 = atmosphere.CO2_REGION_CM1[0] < x[index] < atmosphere.CO2_REGION_CM1[1]
        if quiet[index] or inside_co2 or ratio < params.unexplained_significance or height < floor:
            continue
        result.append(Unexplained(float(x[index]), height, ratio))
    return tuple(sorted(result, key=lambda item: -item.height_absorbance)[:30])


def _robust(values: np.ndarray) -> float:
    return float(np.median(np.abs(values - np.median(values)))) * 1.4826
