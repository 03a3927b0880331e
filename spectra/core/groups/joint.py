"""Joint weighing: which sets of groups explain all bands together, and how much each group is needed for that.

Every set of at most `largest_set` candidates is scored: how common its groups are, how much of what they should show is
missing, and how well the observed bands are accounted for. A strong band that a set leaves unexplained counts against
the set; a band that one group explains counts less for another. Candidates are screened by their own score first.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations

import numpy as np

from spectra.core.group_table import GroupTable
from spectra.core.groups.features import (
    Cluster,
    Reading,
    Scene,
    explanation,
    plateau_cluster,
    read_group,
    shortfall,
    windows_of,
)
from spectra.core.params import MethodParams

TELLING_REGIONS_CM1 = ((1640.0, 1850.0), (2050.0, 2300.0), (3150.0, 3720.0))
SILENT_REGION_CM1 = (2050.0, 2300.0)  # hardly any skeleton or overtone band lies here
PLATEAU_LEAKS = (1.0, 0.5, 0.08, 0.03, 0.01)  # hardly anything but acid and ammonium hydrogen bonds absorbs like that
DOMINANT_SHARE = 0.9
SAME_CLASS_PENALTY = 2.0
NEED_PENALTY = 4.0
MOLECULE_PENALTY = 3.0
MOLECULE_PRIOR = 0.01


@dataclass(frozen=True)
class Posterior:
    """Outcome of the weighing. Arrays are in the order of `ids`; `explains` has shape (groups, clusters)."""

    ids: tuple[str, ...]
    probability: np.ndarray
    readings: dict[str, tuple[Reading, ...]]
    shortfall: dict[str, float]
    clusters: tuple[Cluster, ...]
    explains: np.ndarray
    class_probability: dict[str, float]
    best_set: tuple[str, ...]


@lru_cache(maxsize=8)
def _subsets(count: int, largest: int) -> np.ndarray:
    rows = [np.zeros(count, dtype=np.float32)]
    for size in range(1, min(largest, count) + 1):
        for chosen in combinations(range(count), size):
            row = np.zeros(count, dtype=np.float32)
            row[list(chosen)] = 1
            rows.append(row)
    matrix = np.array(rows)
    matrix.setflags(write=False)
    return matrix


def leak_of(cluster: Cluster, params: MethodParams) -> float:
    """Chance that a band of this size comes from nothing in the table (skeleton, overtone, combination)."""
    if cluster.plateau:
        return PLATEAU_LEAKS[cluster.level]
    leak = params.explanation_leaks[cluster.level]
    if cluster.level >= 3 and any(low <= cluster.position_cm1 <= high for low, high in TELLING_REGIONS_CM1):
        leak *= 0.3
    if 1 <= cluster.level <= 2 and SILENT_REGION_CM1[0] <= cluster.position_cm1 <= SILENT_REGION_CM1[1]:
        leak *= 0.25 if cluster.level == 1 else 0.03
    if cluster.level >= 2 and cluster.position_cm1 < 1500:
        leak = min(1.0, leak * 1.5)
    if cluster.share >= DOMINANT_SHARE:
        leak *= 0.25  # the strongest band of a spectrum hardly ever comes from nothing that has a name
    return leak


def weigh(scene: Scene, table: GroupTable, params: MethodParams) -> Posterior:
    """Probability of each group and wider class given all bands of the scene."""
    gas_possible = True in scene.phases
    items = [group for group in table.groups if not group.never_decidable]
    molecules = list(table.molecules) if gas_possible else []
    ids = tuple(item.id for item in items) + tuple(item.id for item in molecules)
    readings = {item.id: read_group(item, scene, params) for item in (*items, *molecules)}
    missing = {key: shortfall(value) for key, value in readings.items()}
    clusters = scene.clusters
    plateau = plateau_cluster(scene, params)
    if plateau is not None:
        clusters = (*clusters, plateau)
    explains = np.zeros((len(ids), len(clusters)))
    for i, item in enumerate((*items, *molecules)):
        for row in item.bands:
            windows = windows_of(row, scene)
            if not windows:
                continue
            for j, cluster in enumerate(clusters):
                value = explanation(row, cluster, windows, scene, params)
                if value > explains[i, j]:
                    explains[i, j] = value
    priors = np.array(
        [math.log(item.prior / (1 - item.prior)) for item in items] + [math.log(MOLECULE_PRIOR)] * len(molecules)
    )
    own = priors + np.array([missing[key] for key in ids])
    # A group none of whose windows exists in this phase cannot be weighed here at all.
    possible = np.array([any(r.windows for r in readings[key]) for key in ids])
    leaks = np.array([leak_of(cluster, params) for cluster in clusters]) if clusters else np.zeros(0)
    dark = np.log1p(-np.minimum(explains, 0.995))

    def explained(log_dark: np.ndarray) -> np.ndarray:
        return np.log(leaks + (1 - leaks) * (1 - np.exp(log_dark))).sum(axis=-1)

    alone = own + explained(dark) - (np.log(leaks).sum() if len(leaks) else 0.0)
    alone = np.where(possible, alone, -np.inf)
    order = [int(i) for i in np.argsort(-alone, kind="stable") if np.isfinite(alone[i])][: params.candidate_limit]
    chosen = np.array(order, dtype=int)
    sets = _subsets(len(chosen), params.largest_set)
    pair = _pair_penalty(ids, items, molecules, table)
    score = sets @ own[chosen]
    score = score + explained(sets @ dark[chosen])
    sub = pair[np.ix_(chosen, chosen)]
    score = score - 0.5 * np.einsum("mi,ij,mj->m", sets, sub, sets, optimize=True)
    score = score - _needs(ids, items, chosen, sets)
    weights = np.exp((score - score.max()) / params.explanation_temperature)
    weights /= weights.sum()
    probability = np.zeros(len(ids))
    probability[chosen] = weights @ sets
    best = sets[int(np.argmax(score))]
    best_dark = best @ dark[chosen]
    base = explained(best_dark)
    for i in range(len(ids)):
        if i in order or not possible[i]:
            continue
        gain = own[i] + explained(best_dark + dark[i]) - base - float(pair[i, chosen] @ best)
        probability[i] = 1 / (1 + math.exp(min(50.0, max(-50.0, -gain / params.explanation_temperature))))
    for item in items:
        for other in item.implies:
            _add_kind(ids, order, chosen, sets, weights, probability, item.id, other)
    class_probability = {}
    for wider in table.classes:
        members = [k for k, i in enumerate(chosen) if ids[i] in wider.members]
        absent = float(weights[(sets[:, members].sum(axis=1) == 0)].sum()) if members else 1.0
        class_probability[wider.id] = 1 - absent
    return Posterior(
        ids,
        probability,
        readings,
        missing,
        clusters,
        explains,
        class_probability,
        tuple(ids[i] for i, flag in zip(chosen, best, strict=True) if flag),
    )


def _add_kind(
    ids: tuple[str, ...],
    order: list[int],
    chosen: np.ndarray,
    sets: np.ndarray,
    weights: np.ndarray,
    probability: np.ndarray,
    kind: str,
    general: str,
) -> None:
    """A group that is a kind of another (a lactone is an ester) raises the general one: either of them, not the sum."""
    a, b = ids.index(kind), ids.index(general)
    if a in order and b in order:
        ka, kb = int(np.flatnonzero(chosen == a)[0]), int(np.flatnonzero(chosen == b)[0])
        probability[b] = float(weights[(sets[:, ka] + sets[:, kb]) > 0].sum())
    else:
        probability[b] = max(probability[b], probability[a])


def _pair_penalty(ids: tuple[str, ...], items: list, molecules: list, table: GroupTable) -> np.ndarray:
    size = len(ids)
    pair = np.zeros((size, size))
    carbonyl = next((set(c.members) for c in table.classes if c.id == "carbonyl"), set())
    halogen = next((set(c.members) for c in table.classes if c.id == "halogenated"), set())
    gases = {item.id for item in molecules}
    for i in range(size):
        for j in range(i + 1, size):
            penalty = 0.0
            if ids[i] in carbonyl and ids[j] in carbonyl:
                penalty += SAME_CLASS_PENALTY
            if ids[i] in halogen and ids[j] in halogen:
                penalty += 0.5 * SAME_CLASS_PENALTY
            if ids[i] in gases or ids[j] in gases:
                penalty += MOLECULE_PENALTY
            pair[i, j] = pair[j, i] = penalty
    return pair


def _needs(ids: tuple[str, ...], items: list, chosen: np.ndarray, sets: np.ndarray) -> np.ndarray:
    total = np.zeros(len(sets))
    place = {ids[i]: k for k, i in enumerate(chosen)}
    for item in items:
        if item.id in place and item.needs:
            for need in item.needs:
                has = sets[:, place[need]] if need in place else 0.0
                total += NEED_PENALTY * sets[:, place[item.id]] * (1 - has)
    return total
