"""From the weighing to verdicts: every band and absence for and against, in sentences with numbers and units.

"Supported" needs the diagnostic bands, the companions that can be read, and no better explanation; "contradicted" needs
bands that are missing where they would have been seen. Everything between is undecided and names what would decide.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from spectra.core.group_table import Group, GroupTable
from spectra.core.groups.features import EDGE_SLACK_CM1, LEVEL_CHANCES, Reading, Scene, phases_of, scene_of
from spectra.core.groups.joint import DOMINANT_SHARE, Posterior, weigh
from spectra.core.groups.sentences import sentence_of, weaker_than_usual
from spectra.core.groups.substitution import substitution_note
from spectra.core.params import MethodParams
from spectra.core.results import Band, GroupClaim, Lane, LaneWindow, Mask, Prepared
from spectra.core.types import Conditions, Finding, Severity

FINGERPRINT_CM1 = 1500.0
LEAST_USUAL_CHANCE = 0.19
LEAST_PATTERN_CHANCE = 0.30
LACKING_PENALTY = -1.5
MANIFOLD_SHORTFALL = -4.0  # several bands too weak or missing at once
LIKELY_MEMBER = 0.77
MEDIUM = 3  # level from which a diagnostic band can carry the weight "strong"


@dataclass(frozen=True)
class GroupWeighing:
    """Claims in the table's order (wider classes last), lanes, which groups use which band, and findings."""

    claims: tuple[GroupClaim, ...]
    lanes: tuple[Lane, ...]
    used_by: dict[Band, tuple[str, ...]]
    findings: tuple[Finding, ...]
    probability: dict[str, float]  # uncalibrated; for the challenge set and its reliability table only


def weigh_groups(
    prepared: Prepared,
    bands: tuple[Band, ...],
    table: GroupTable,
    conditions: Conditions,
    params: MethodParams,
    *,
    expected: Iterable[str] | None = None,
    forbidden: Iterable[str] = (),
    tolerated: Iterable[str] = (),
    unreadable: tuple[Mask, ...] = (),
) -> GroupWeighing:
    """Verdict, ledger and lane of every group of the table.

    expected : groups that the declaration has (None: nothing is declared); forbidden : groups it must not have;
    tolerated : groups that may be there or not without contradicting the declaration; unreadable : regions in which
    the bands are not the sample's own (a moist matrix): neither their bands nor their absences count.
    """
    prepared, bands = _without(prepared, bands, unreadable)
    declared = None if expected is None else frozenset(expected)
    barred, spared = frozenset(forbidden), frozenset(tolerated)
    scene = scene_of(prepared, bands, conditions, params)
    posterior = weigh(scene, table, params)
    claims: list[GroupClaim] = []
    lanes: list[Lane] = []
    used: dict[Band, list[str]] = {}
    probability = {}
    verdicts: dict[str, str] = {}
    for group in table.groups:
        if group.never_decidable:
            claims.append(_never(group, declared, barred))
            verdicts[group.id] = "undecided"
            continue
        claim, chance = _judge(group, posterior, scene, table, params, declared, barred)
        verdicts[group.id] = claim.verdict
        probability[group.id] = chance
        if group.id in spared and group.id not in barred:
            claim = replace(claim, agrees="neutral")
        claims.append(claim)
        lanes.append(_lane(group, posterior.readings[group.id], claim.verdict))
        if claim.verdict in ("supported", "undecided"):
            for reading in posterior.readings[group.id]:
                if reading.state == "found" and (claim.verdict == "supported" or reading.row.role == "diagnostic"):
                    for band in reading.bands:
                        used.setdefault(band, []).append(group.id)
    for wider in table.classes:
        chance = posterior.class_probability[wider.id]
        probability[wider.id] = chance
        claims.append(
            _class_claim(
                wider.id,
                wider.name,
                wider.members,
                wider.would_decide,
                chance,
                verdicts,
                posterior,
                table,
                params,
                declared,
                barred,
            )
        )
    findings = ()
    if len(phases_of(conditions)) > 1:
        findings = (
            Finding(
                "groups.phase_unknown",
                Severity.WARNING,
                "Neither phase nor technique is known, so the windows of liquids, solids and gases were all "
                f"used, widened by {params.unknown_phase_widening_cm1:g} cm-1; fewer groups can be decided.",
                remedy="Enter the phase or the technique.",
            ),
        )
    return GroupWeighing(
        tuple(claims),
        tuple(lanes),
        {band: tuple(dict.fromkeys(ids)) for band, ids in used.items()},
        findings,
        probability,
    )


def _without(
    prepared: Prepared, bands: tuple[Band, ...], unreadable: tuple[Mask, ...]
) -> tuple[Prepared, tuple[Band, ...]]:
    """The spectrum as the groups may read it: nothing of what lies in an unreadable region."""
    if not unreadable:
        return prepared, bands
    x, usable = prepared.x_cm1, prepared.usable.copy()
    for mask in unreadable:
        usable &= ~((x >= mask.low_cm1) & (x <= mask.high_cm1))
    usable.setflags(write=False)
    kept = tuple(b for b in bands if not any(m.low_cm1 <= b.position_cm1 <= m.high_cm1 for m in unreadable))
    return replace(prepared, usable=usable), kept


def agreement(identifier: str, verdict: str, declared: frozenset[str] | None, barred: frozenset[str]) -> str:
    """yes, no or neutral: whether the verdict fits what was declared."""
    if verdict not in ("supported", "contradicted"):
        return "neutral"
    if identifier in barred:
        return "no" if verdict == "supported" else "yes"
    if declared is None:
        return "neutral"
    return "yes" if (identifier in declared) == (verdict == "supported") else "no"


def weight_in_words(verdict: str, chance: float, weak_evidence: bool = False) -> str:
    """The weight of a verdict in plain words; it is not calibrated and therefore no number.

    weak_evidence : no diagnostic band reaches medium size, so that nothing beside it makes the verdict strong.
    """
    if verdict == "not_examined":
        return "cannot be weighed"
    if verdict == "supported":
        return "strong" if chance >= 0.98 and not weak_evidence else "good"
    if verdict == "contradicted":
        return "strong" if chance <= 0.005 else "good"
    return "leans towards it" if chance >= 0.6 else "leans against it" if chance <= 0.15 else "open"


def usual_enough(reading: Reading, least: float = LEAST_USUAL_CHANCE) -> bool:
    """Whether a band that was found is not far weaker than this group usually shows it."""
    if any(band.kind == "saturated" for band in reading.bands):
        return True
    if reading.row.dominant and reading.share < DOMINANT_SHARE:
        return False
    return sum(LEVEL_CHANCES[reading.row.strength][: reading.level + 1]) >= least


def _whole_pattern(readings: tuple[Reading, ...]) -> bool:
    """Whether at least three separate diagnostic or companion windows all show their own band at its usual size."""
    sets: dict[str, list[Reading]] = {}
    for reading in readings:
        if reading.row.role != "supporting" and reading.windows:
            sets.setdefault(reading.row.set or reading.row.name, []).append(reading)
    shown = [
        members
        for members in sets.values()
        if any(r.state == "found" and not r.by_shoulder and usual_enough(r, LEAST_PATTERN_CHANCE) for r in members)
    ]
    places = {round(b.position_cm1, 1) for members in shown for r in members for b in r.bands}
    return len(shown) == len(sets) and len(shown) >= 3 and len(places) >= 3


def _has_a_band_of_its_own(index: int, posterior: Posterior) -> bool:
    """Whether at least one visible band is accounted for by this group and by no other of the best explanation."""
    others = [k for k, other in enumerate(posterior.ids) if other in posterior.best_set and k != index]
    for j, cluster in enumerate(posterior.clusters):
        mine = posterior.explains[index][j]
        if cluster.level >= 2 and mine >= 0.45 and all(posterior.explains[k][j] < 0.5 * mine for k in others):
            return True
    return False


def _lacks_a_diagnostic(readings: tuple[Reading, ...]) -> bool:
    """Whether a diagnostic band (or every member of a set) is missing or almost so, where it could have been seen."""
    sets: dict[str, list[float]] = {}
    for reading in readings:
        if reading.row.role == "diagnostic" and reading.windows:
            sets.setdefault(reading.row.set or f"row {id(reading)}", []).append(reading.penalty)
    return any(max(values) <= LACKING_PENALTY for values in sets.values())


def _sets_found(readings: tuple[Reading, ...], role: str, least: float = LEAST_USUAL_CHANCE) -> tuple[bool, bool]:
    """(all found, all readable) over the rows of a role; one member is enough of a set of alternatives."""
    found, readable = True, True
    sets: dict[str, list[Reading]] = {}
    for reading in readings:
        if reading.row.role != role or not reading.windows:
            continue
        sets.setdefault(reading.row.set or f"row {id(reading)}", []).append(reading)
    for members in sets.values():
        good = [r for r in members if r.state == "found" and not r.by_shoulder and usual_enough(r, least)]
        if not good:
            found = False
            if all(r.state == "not_readable" for r in members):
                readable = False
    return found, readable


def _judge(
    group: Group,
    posterior: Posterior,
    scene: Scene,
    table: GroupTable,
    params: MethodParams,
    declared: frozenset[str] | None,
    barred: frozenset[str],
) -> tuple[GroupClaim, float]:
    index = posterior.ids.index(group.id)
    chance = float(posterior.probability[index])
    readings = posterior.readings[group.id]
    here = [r for r in readings if r.windows]
    diagnostic = [r for r in here if r.row.role == "diagnostic"]
    found, readable = _sets_found(readings, "diagnostic")
    companions_found, companions_readable = _sets_found(readings, "companion")
    against = [
        sentence_of(r)
        for r in here
        if r.state == "missing" and r.row.absence != "nothing" and not _covered_by_set(r, readings)
    ]
    for_ = [sentence_of(r) for r in here if r.state == "found"]
    unread = [
        sentence_of(r)
        for r in here
        if r.state == "not_readable" and not (r.too_strong is not None and r.row.role == "supporting")
    ]
    rivals = _rivals(group, index, posterior, table)
    weak_found = [r for r in diagnostic if r.state == "found" and r.penalty < -1.0]
    against += [weaker_than_usual(r, scene) for r in weak_found]
    if rivals:
        against.append(f"Its bands are accounted for as well by: {', '.join(rivals)}.")
    for need in group.needs:
        other = float(posterior.probability[posterior.ids.index(need)]) if need in posterior.ids else 0.0
        if other < params.support_probability:
            against.append(f"It needs {table.group(need).name}, which is not supported.")
    if not diagnostic or all(r.state == "not_readable" for r in diagnostic) or scene.strongest <= 0:
        verdict = "not_examined"
        if not diagnostic:
            against = ["It is not looked for in this phase: no window is known."]
        elif scene.strongest <= 0:
            against = ["The spectrum shows no band at all, so nothing can be weighed."]
    elif (
        (
            chance >= params.support_probability
            or (
                chance >= params.pattern_probability
                and group.id in posterior.best_set
                and _whole_pattern(readings)
                and _has_a_band_of_its_own(index, posterior)
            )
        )
        and found
        and readable
        and (companions_found or not companions_readable or _companion_shortfall(readings) > -0.8)
        and not _rests_on_one_fingerprint_band(group, readings)
        and not group.one_band_only
    ):
        verdict = "supported"
    elif (
        chance <= params.contradiction_probability
        and posterior.shortfall[group.id] <= -params.contradiction_evidence
        and (_lacks_a_diagnostic(readings) or posterior.shortfall[group.id] <= MANIFOLD_SHORTFALL)
    ):
        verdict = "contradicted"
    else:
        verdict = "undecided"
    note = group.note
    if group.id == "aromatic" and verdict == "supported":
        extra = substitution_note(scene)
        note = f"{extra} {note}".strip()
    hazard = (
        group.hazard
        if group.hazard
        and (
            verdict == "supported"
            or (verdict == "undecided" and any(r.state == "found" for r in diagnostic) and chance > 0.05)
        )
        else None
    )
    would = (
        ()
        if verdict in ("supported", "contradicted")
        else (
            *([f"Measure the missing region: {unread[0]}"] if unread and verdict == "not_examined" else []),
            *group.would_decide,
        )
    )
    against += unread
    return GroupClaim(
        group.id,
        group.name,
        verdict,
        None,
        weight_in_words(
            verdict,
            chance,
            not any(r.level >= MEDIUM or any(b.kind == "saturated" for b in r.bands) for r in diagnostic),
        ),
        agreement(group.id, verdict, declared, barred),
        tuple(for_),
        tuple(against),
        would,
        hazard,
        note,
    ), chance


def _covered_by_set(reading: Reading, readings: tuple[Reading, ...]) -> bool:
    return bool(reading.row.set) and any(
        other.row.set == reading.row.set and other.state == "found" for other in readings
    )


def _companion_shortfall(readings: tuple[Reading, ...]) -> float:
    return min((r.penalty for r in readings if r.row.role == "companion"), default=0.0)


def _rests_on_one_fingerprint_band(group: Group, readings: tuple[Reading, ...]) -> bool:
    """Below 1500 cm-1 a group is never called from one band."""
    seen = [r for r in readings if r.state == "found" and r.row.role != "supporting"]
    if any(max(b.position_cm1 for b in r.bands) >= FINGERPRINT_CM1 for r in seen if r.bands) or any(
        r.row.kind == "plateau" for r in seen
    ):
        return False
    return len({round(b.position_cm1) for r in seen for b in r.bands}) < 2


def _rivals(group: Group, index: int, posterior: Posterior, table: GroupTable) -> list[str]:
    """Groups of the best explanation that account for this group's diagnostic bands at least as well."""
    names = {item.id: item.name for item in table.groups}
    mine = posterior.explains[index]
    strong = [j for j, cluster in enumerate(posterior.clusters) if mine[j] > 0.3 and cluster.level >= 2]
    rivals = []
    for k, other in enumerate(posterior.ids):
        if other == group.id or other not in posterior.best_set or not strong:
            continue
        shared = np.mean([posterior.explains[k][j] >= 0.7 * mine[j] for j in strong])
        if shared >= 0.5:
            rivals.append(names.get(other, other.replace("_", " ") + " gas"))
    return rivals if group.id not in posterior.best_set else []


def _never(group: Group, declared: frozenset[str] | None, barred: frozenset[str]) -> GroupClaim:
    wanted = (declared is not None and group.id in declared) or group.id in barred
    return GroupClaim(
        group.id,
        group.name,
        "undecided",
        None,
        "open",
        "neutral",
        (),
        (group.note,),
        group.would_decide,
        group.hazard if wanted else None,
        group.note,
    )


def _lane(group: Group, readings: tuple[Reading, ...], verdict: str) -> Lane:
    windows = []
    for reading in readings:
        for low, high in reading.windows:
            inside = tuple(
                b.position_cm1 for b in reading.bands if low - EDGE_SLACK_CM1 <= b.position_cm1 <= high + EDGE_SLACK_CM1
            )
            state = reading.state if reading.state != "found" or inside or reading.row.kind == "plateau" else "missing"
            windows.append(LaneWindow(low, high, reading.row.name, reading.row.role, state, inside))
    return Lane(group.id, group.name, verdict, tuple(windows))


def _class_claim(
    identifier: str,
    name: str,
    members: tuple[str, ...],
    would: tuple[str, ...],
    chance: float,
    verdicts: dict[str, str],
    posterior: Posterior,
    table: GroupTable,
    params: MethodParams,
    declared: frozenset[str] | None,
    barred: frozenset[str],
) -> GroupClaim:
    names = {item.id: item.name for item in table.groups}
    supported = [names[m] for m in members if verdicts.get(m) == "supported"]
    open_ = [m for m in members if verdicts.get(m) == "undecided"]
    shut = [m for m in members if verdicts.get(m) == "contradicted"]
    unseen = [m for m in members if verdicts.get(m) == "not_examined"]
    likely = sorted(
        (m for m in members if m in posterior.ids), key=lambda m: -posterior.probability[posterior.ids.index(m)]
    )[:3]
    for_, state = [], ["Wider class."]
    if supported:
        for_.append(f"Supported among its members: {', '.join(supported)}.")
    if shut:
        state.append(f"Members ruled out: {', '.join(names[m] for m in shut)}.")
    if supported:
        verdict, chance = "supported", max(chance, params.class_probability)
    elif chance >= params.class_probability and _member_seen(likely, posterior):
        verdict = "supported"
        for_.append(f"Its bands are there; which member it is stays open ({', '.join(names[m] for m in likely)}).")
    elif len(unseen) == len(members):
        verdict = "not_examined"
    elif (shut and not open_ and len(shut) >= len(unseen)) or (
        chance <= params.contradiction_probability
        and shut
        and all(posterior.probability[posterior.ids.index(m)] <= params.contradiction_probability for m in open_)
        and all(posterior.shortfall[m] < -0.7 for m in open_)
    ):
        verdict = "contradicted"
    else:
        verdict = "undecided"
    if open_:
        state.append(f"Members still open: {', '.join(names[m] for m in open_)}.")
    against = ("Every member that could be examined is ruled out or unlikely.",) if verdict == "contradicted" else ()
    wanted = None if declared is None else (declared | {identifier} if declared & set(members) else declared)
    return GroupClaim(
        identifier,
        name,
        verdict,
        None,
        weight_in_words(verdict, chance),
        agreement(identifier, verdict, wanted, barred),
        tuple(for_),
        against,
        () if verdict in ("supported", "contradicted") else would,
        None,
        " ".join(state),
        members,
    )


def _member_seen(likely: list[str], posterior: Posterior) -> bool:
    """At least one member that is likely by itself shows all its diagnostic bands outright."""
    return any(
        _sets_found(posterior.readings[m], "diagnostic", LEAST_PATTERN_CHANCE)[0]
        and posterior.probability[posterior.ids.index(m)] >= LIKELY_MEMBER
        for m in likely
    )
