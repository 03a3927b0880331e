"""What the spectrum shows in each window of the group table: found, missing or not readable, and how strong.

Levels 0-4 stand for none, very weak, weak, medium, strong: shares of the strongest band with the limits of the method
parameters.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from spectra.core.group_table import BandRow, Group, Molecule
from spectra.core.params import MethodParams
from spectra.core.results import Band, Prepared
from spectra.core.types import Conditions, Phase, Technique

# Chance of each level (none, vw, w, m, s) for a band that the group has, by its usual strength.
LEVEL_CHANCES = {
    "s": (0.01, 0.02, 0.05, 0.22, 0.70),
    "m-s": (0.02, 0.04, 0.14, 0.40, 0.40),
    "w-s": (0.02, 0.08, 0.25, 0.30, 0.35),
    "m": (0.03, 0.07, 0.25, 0.45, 0.20),
    "w-m": (0.08, 0.17, 0.40, 0.27, 0.08),
    "w": (0.12, 0.33, 0.37, 0.14, 0.04),
    "vw": (0.30, 0.45, 0.20, 0.04, 0.01),
    "v": (0.25, 0.20, 0.22, 0.18, 0.15),
}
ABSENCE_WEIGHT = {"counts": 1.0, "little": 0.5, "nothing": 0.0}
TABLE_LEVELS = {"vw": 1, "w": 2, "m": 3, "s": 4, "vs": 4}  # the band table's letters on the scale of the levels
CREDIBLE_MEMBERSHIP = 0.25
SERIES_LINE_WIDTH_CM1 = 13.0
SERIES_GAP_CM1 = 36.0
SERIES_LEAST = 5
LARGEST_EXPLANATION = 0.97
EDGE_SLACK_CM1 = 6.0  # a band further outside of a window than this is none of its bands
LEAST_SIZE_CHANCE = 0.10  # a band so large that a row shows one like it more rarely than this is none of its bands
WEAK_ROWS = ("vw", "w", "w-m")


@dataclass(frozen=True)
class Cluster:
    """Neighbouring maxima that one vibration explains together (in gases the branches of one band)."""

    position_cm1: float
    fwhm_cm1: float
    share: float  # of the strongest band's height
    level: int
    members: tuple[Band, ...]
    plateau: bool = False
    series: bool = False  # rotational lines of one band of a gas: only their centre has a meaning


@dataclass(frozen=True)
class Reading:
    """One window of one group as the spectrum shows it."""

    row: BandRow
    windows: tuple[tuple[float, float], ...]
    state: str  # found, missing, not_readable
    level: int
    share: float
    bands: tuple[Band, ...]
    credibility: float
    penalty: float  # natural logarithm, zero or below: what the shortfall says against the group
    by_shoulder: bool = False
    too_strong: Band | None = None  # the band that lies here and is larger than this row allows


@dataclass(frozen=True)
class Scene:
    """Everything the weighing reads: clusters of bands, the readable range and the sensitivity."""

    clusters: tuple[Cluster, ...]
    bands: tuple[Band, ...]
    strongest: float
    limit_share: float  # a band below this share of the strongest would not have been seen
    phases: tuple[bool, ...]  # which window sets apply: False condensed, True gas
    widening_cm1: float
    prepared: Prepared
    depth_scaled: bool = False  # heights were scaled to one penetration depth before they were ranked

    @property
    def saturated(self) -> bool:
        """Whether some band is cut off by total absorption."""
        return any(band.kind == "saturated" for band in self.bands)


def phases_of(conditions: Conditions) -> tuple[bool, ...]:
    """Which windows apply; both when neither phase nor technique tells."""
    if conditions.phase is Phase.GAS or conditions.technique is Technique.GAS_CELL:
        return (True,)
    if conditions.phase is not None or conditions.technique in (
        Technique.DISC,
        Technique.MULL,
        Technique.ATR,
        Technique.DIFFUSE,
    ):
        return (False,)
    return (False, True)


def level_of(share: float, params: MethodParams) -> int:
    """0 none, 1 very weak, 2 weak, 3 medium, 4 strong."""
    limits = (params.absent_level, params.weak_level, params.medium_level, params.strong_level)
    return sum(share >= limit for limit in limits)


def scene_of(prepared: Prepared, bands: tuple[Band, ...], conditions: Conditions, params: MethodParams) -> Scene:
    """Clusters and sensitivity of one spectrum. ATR heights are scaled to equal depth before they are ranked."""
    phases = phases_of(conditions)
    gas = phases == (True,)
    # A shallow penetration at high wavenumbers makes bands there look weak; that is the technique, not the group.
    depth = (lambda position: position / 1000.0) if conditions.technique is Technique.ATR else (lambda position: 1.0)
    sizes = {band: _size(band) * depth(band.position_cm1) for band in bands if band.kind != "shoulder"}
    strongest = max(sizes.values(), default=0.0)
    clusters: list[Cluster] = []
    reach = 22.0 if gas else 9.0
    for series in _line_series(sizes, max(SERIES_LINE_WIDTH_CM1, 1.8 * prepared.resolution_cm1)) if gas else []:
        top = max(series, key=lambda b: sizes[b])
        total = sum(sizes[b] for b in series)
        centre = sum(sizes[b] * b.position_cm1 for b in series) / total
        share = sizes[top] / strongest
        clusters.append(
            Cluster(
                centre,
                series[-1].position_cm1 - series[0].position_cm1,
                share,
                level_of(share, params),
                tuple(series),
                series=True,
            )
        )
    taken: set[Band] = {band for cluster in clusters for band in cluster.members}
    for band in sorted(sizes, key=lambda b: -sizes[b]):
        if band in taken:
            continue
        near = [
            other
            for other in sizes
            if other not in taken
            and abs(other.position_cm1 - band.position_cm1) <= max(reach, 0.35 * min(band.fwhm_cm1, 120.0))
            and (other is band or sizes[other] <= 0.8 * sizes[band] or gas)
        ]
        taken.update(near)
        share = sizes[band] / strongest if strongest > 0 else 0.0
        clusters.append(
            Cluster(
                band.position_cm1,
                band.fwhm_cm1,
                share,
                level_of(share, params),
                tuple(sorted(near, key=lambda b: b.position_cm1)),
            )
        )
    clusters.sort(key=lambda c: -c.share)
    noise = float(np.median(prepared.noise))
    limit = 6 * noise / strongest if strongest > 0 else 1.0
    return Scene(
        tuple(clusters[:60]),
        bands,
        strongest,
        limit,
        phases,
        params.unknown_phase_widening_cm1 if len(phases) > 1 else 0.0,
        prepared,
        conditions.technique is Technique.ATR,
    )


def _line_series(sizes: dict[Band, float], widest_cm1: float) -> list[list[Band]]:
    """Runs of at least five narrow maxima that follow one another closely: the rotational structure of one gas band."""
    ordered = sorted((b for b in sizes if b.kind == "maximum"), key=lambda b: b.position_cm1)
    runs: list[list[Band]] = []
    for band in ordered:
        if band.fwhm_cm1 > widest_cm1:
            continue
        if runs and band.position_cm1 - runs[-1][-1].position_cm1 <= SERIES_GAP_CM1:
            runs[-1].append(band)
        else:
            runs.append([band])
    return [run for run in runs if len(run) >= SERIES_LEAST]


def _size(band: Band) -> float:
    """Height that counts: a sharp band on the flank of another is no bigger than a few times its own prominence."""
    return min(band.height_absorbance, 3 * band.prominence_absorbance)


def windows_of(row: BandRow, scene: Scene) -> tuple[tuple[float, float], ...]:
    """The row's windows for the scene's phases, widened where the phase is unknown, overlapping ones joined."""
    found = sorted(w for gas in scene.phases if (w := row.window(gas)) is not None)
    joined: list[tuple[float, float]] = []
    for low, high in ((low - scene.widening_cm1, high + scene.widening_cm1) for low, high in found):
        if joined and low <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(high, joined[-1][1]))
        else:
            joined.append((low, high))
    return tuple(joined)


def membership(position: float, windows: tuple[tuple[float, float], ...], softness: float) -> float:
    """1 inside a window, falling softly outside, and 0 further outside than EDGE_SLACK_CM1."""
    best = 0.0
    for low, high in windows:
        outside = max(low - position, position - high, 0.0)
        if outside > EDGE_SLACK_CM1:
            continue
        best = max(best, math.exp(-0.5 * (outside / (0.5 * softness)) ** 2))
    return best


def _width_fit(width: float, limits: tuple[float, float]) -> float:
    low, high = limits
    if width < low:
        return math.exp(-((math.log(low / max(width, 1.0))) ** 2) / 0.18)
    if width > high > 0:
        return math.exp(-((math.log(width / high)) ** 2) / 0.35)
    return 1.0


def _widths(row: BandRow, scene: Scene) -> tuple[float, float]:
    pairs = [row.widths(gas) for gas in scene.phases]
    return min(p[0] for p in pairs), max(p[1] for p in pairs)


def explanation(
    row: BandRow, cluster: Cluster, windows: tuple[tuple[float, float], ...], scene: Scene, params: MethodParams
) -> float:
    """Chance (0 to 0.97) that this row accounts for this cluster: place, shape and size all have to fit."""
    if (row.kind == "plateau") != cluster.plateau:
        # A broad O-H or N-H absorption reaches far; its tail may well be what a plateau window reads.
        if not (cluster.plateau and row.widths(False)[0] >= 80):
            return 0.0
        return 0.6 if any(low - 600 < cluster.position_cm1 < high + 100 for low, high in windows) else 0.0
    if cluster.plateau:
        return 0.9 if any(low - 100 < cluster.position_cm1 < high + 100 for low, high in windows) else 0.0
    if cluster.series:
        place = membership(cluster.position_cm1, windows, params.edge_softness_cm1)
    else:
        largest = max(_size(band) for band in cluster.members)
        place = max(
            membership(band.position_cm1, windows, params.edge_softness_cm1)
            for band in cluster.members
            if _size(band) >= 0.6 * largest
        )
    if place < 0.05:
        return 0.0
    if not scene.saturated and exceeds(row, cluster.level):
        return 0.0
    at_least = sum(LEVEL_CHANCES[row.strength][cluster.level :])
    size = min(1.0, 0.05 + 2.2 * at_least)
    if scene.saturated:
        # The true height of the strongest band is unknown, so every share is too large and speaks against nothing.
        size = max(size, 0.8)
    return min(LARGEST_EXPLANATION, place * _width_fit(cluster.fwhm_cm1, _widths(row, scene)) * size)


def exceeds(row: BandRow, level: int) -> bool:
    """Whether a band of this level is larger than the row's own band ever is, so that it must come from something else.

    Diagnostic and companion bands that range from weak to medium are spared: in a small molecule one of them may well
    be the strongest band there is.
    """
    if row.strength not in WEAK_ROWS or (row.strength == "w-m" and row.role != "supporting"):
        return False
    return sum(LEVEL_CHANCES[row.strength][level:]) < LEAST_SIZE_CHANCE


def plateau_cluster(scene: Scene, params: MethodParams) -> Cluster | None:
    """A very broad absorption between 2450 and 2750 cm-1, where only acid and ammonium hydrogen bonds absorb so."""
    share = plateau_share(scene, (2450.0, 2750.0))
    if share is None or share < 0.04:
        return None
    return Cluster(2600.0, 400.0, share, level_of(share, params), (), plateau=True)


def plateau_share(scene: Scene, window: tuple[float, float]) -> float | None:
    """Lower quartile of the corrected absorbance in the window as a share of the strongest band; None: not covered."""
    x = scene.prepared.x_cm1
    inside = (x >= window[0]) & (x <= window[1])
    if not inside.any() or x[0] > window[0] or x[-1] < window[1] or scene.strongest <= 0:
        return None
    return float(np.percentile(scene.prepared.smooth[inside], 25)) / scene.strongest


def readable_share(windows: tuple[tuple[float, float], ...], prepared: Prepared) -> float:
    """Share of the windows that was recorded and is not masked."""
    x, step = prepared.x_cm1, prepared.step_cm1
    total = sum(high - low for low, high in windows)
    seen = sum(float(((x >= low) & (x <= high) & prepared.usable).sum()) * step for low, high in windows)
    return min(1.0, seen / total) if total > 0 else 0.0


def read_row(row: BandRow, scene: Scene, params: MethodParams) -> Reading:
    """State, level and shortfall of one window."""
    windows = windows_of(row, scene)
    if not windows:
        return Reading(row, (), "not_readable", 0, 0.0, (), 0.0, 0.0)
    widths = _widths(row, scene)
    if row.kind == "plateau":
        share = plateau_share(scene, windows[0])
        if share is None:
            return Reading(row, windows, "not_readable", 0, 0.0, (), 0.0, 0.0)
        level = level_of(share, params)
        found = share >= 0.05
        return Reading(
            row,
            windows,
            "found" if found else "missing",
            level if found else min(level, 1),
            share,
            (),
            1.0 if found else 0.0,
            _penalty(row, level if share >= 0.03 else 0, share),
        )
    best_share, best, credible = 0.0, None, 0.0
    hits: list[Band] = []
    too_strong: Band | None = None
    for cluster in scene.clusters:
        # Only the centre of a series of lines says where the vibration lies, so no single line of it fills a window.
        if cluster.series and membership(cluster.position_cm1, windows, params.edge_softness_cm1) < CREDIBLE_MEMBERSHIP:
            continue
        for band in cluster.members:
            place = membership(band.position_cm1, windows, params.edge_softness_cm1)
            if place < CREDIBLE_MEMBERSHIP:
                continue
            fit = place * _width_fit(band.fwhm_cm1, widths)
            if fit < CREDIBLE_MEMBERSHIP:
                continue
            share = cluster.share * _size(band) / max(_size(max(cluster.members, key=_size)), 1e-12)
            # The word of the band table counts as well, so that no sentence calls a strong band a weak row's own.
            if exceeds(row, max(level_of(share, params), TABLE_LEVELS[band.intensity])):
                if too_strong is None or band.height_absorbance > too_strong.height_absorbance:
                    too_strong = band
                continue
            hits.append(band)
            if share * fit > best_share * max(credible, 1e-9):
                best_share, best, credible = share, band, fit
    by_shoulder = False
    if best is None:
        for band in scene.bands:
            if band.kind == "shoulder" and membership(band.position_cm1, windows, params.edge_softness_cm1) > 0.8:
                share = 0.5 * band.height_absorbance / scene.strongest if scene.strongest > 0 else 0.0
                if exceeds(row, TABLE_LEVELS[band.intensity]):
                    continue
                if share > best_share:
                    best_share, best, credible, by_shoulder = share, band, 0.5, True
        if best is not None:
            hits = [best]
    readable = readable_share(windows, scene.prepared)
    if best is None and too_strong is not None:
        # Beneath a band that belongs to something else the row's own weak band can be neither seen nor missed.
        return Reading(row, windows, "not_readable", 0, 0.0, (), 0.0, 0.0, too_strong=too_strong)
    if best is None:
        if readable < 0.6 or scene.strongest <= 0:
            return Reading(row, windows, "not_readable", 0, 0.0, (), 0.0, 0.0)
        level = level_of(scene.limit_share, params) if scene.limit_share > params.absent_level else 0
        return Reading(row, windows, "missing", level, 0.0, (), 0.0, _penalty(row, level, scene.limit_share))
    level = level_of(best_share, params)
    penalty = _penalty(row, level, best_share)
    if best.kind == "saturated":
        penalty = 0.0
    if row.dominant and best_share < 0.9 and best.kind != "saturated":
        penalty -= 1.5
    if readable < 0.6:
        penalty *= 0.3
    return Reading(
        row,
        windows,
        "found",
        level,
        best_share,
        tuple(sorted(set(hits), key=lambda b: b.position_cm1)),
        credible,
        penalty,
        by_shoulder,
    )


def _penalty(row: BandRow, level: int, share: float) -> float:
    chances = LEVEL_CHANCES[row.strength]
    return ABSENCE_WEIGHT[row.absence] * math.log(max(sum(chances[: level + 1]), 1e-3))


def read_group(group: Group | Molecule, scene: Scene, params: MethodParams) -> tuple[Reading, ...]:
    """All windows of a group, or of a small molecule, in the table's order."""
    return tuple(read_row(row, scene, params) for row in group.bands)


def shortfall(readings: tuple[Reading, ...]) -> float:
    """Sum of what missing bands say against the group.

    Of a set of alternatives the best member counts when one of them was found, their mean when none was.
    """
    total, sets = 0.0, {}
    for reading in readings:
        if not reading.windows:
            continue
        if reading.row.set:
            sets.setdefault(reading.row.set, []).append(reading)
        else:
            total += reading.penalty
    for members in sets.values():
        values = [r.penalty for r in members]
        found = any(r.state != "missing" for r in members)
        total += max(values) if found else sum(values) / len(values)
    return total
