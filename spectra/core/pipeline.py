"""From one block to the whole result, as a chemist reads: measurement, bands, groups, identity, rest.

`analyse` is a pure function of its arguments: same bytes, parameters, table and references, same result. It touches no
file, clock setting or database.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np

from spectra.core import bands as band_picking
from spectra.core import identity as identity_testing
from spectra.core import impurities as impurity_screening
from spectra.core import structure as structures
from spectra.core.atmosphere import CO2_REGION_CM1
from spectra.core.errors import CoreError
from spectra.core.group_table import GroupTable
from spectra.core.groups import GroupWeighing, weigh_groups
from spectra.core.measurement import stated_resolution_cm1
from spectra.core.params import MethodParams
from spectra.core.preparation import prepare
from spectra.core.results import (
    AnalysisResult,
    Band,
    Identity,
    Impurities,
    Mask,
    Prepared,
    ReferenceInput,
    WatchInput,
    plain,
)
from spectra.core.types import Conditions, Finding, Severity, SpectrumBlock, Technique
from spectra.core.version import CORE_VERSION, RESULT_SCHEMA

# Where the water of a moist salt disc absorbs: its O-H stretch and its bend.
WET_REGIONS = (
    Mask(1600.0, 1660.0, "moist salt disc: left out of the groups"),
    Mask(3100.0, 3700.0, "moist salt disc: left out of the groups"),
)

Progress = Callable[[str, float], None]


def analyse(
    block: SpectrumBlock,
    *,
    conditions: Conditions,
    params: MethodParams,
    table: GroupTable,
    reference: ReferenceInput | None = None,
    watch: Sequence[WatchInput] = (),
    smiles: str | None = None,
    expected_groups: tuple[str, ...] = (),
    forbidden_groups: tuple[str, ...] = (),
    progress: Progress | None = None,
) -> AnalysisResult:
    """Read one spectrum against its declaration.

    expected_groups, forbidden_groups : identifiers of the group table that the material must or must not have, beside
    those of the structure. progress : called with a stage name and a share between 0 and 1.
    Raises CoreError when the block, the structure or an identifier cannot be worked with; a reference or watch-list
    spectrum that cannot is named in its section instead.
    """

    def stage(name: str, share: float) -> None:
        if progress is not None:
            progress(name, share)

    known = {group.id for group in table.groups} | {wider.id for wider in table.classes}
    for name in (*expected_groups, *forbidden_groups):
        if name not in known:
            raise CoreError(
                "analysis.group", f"{name!r} is no group of the table.", remedy="Use an identifier of the table."
            )
    declared_structure = _structure(smiles, table)
    stage("measurement", 0.1)
    prepared = prepare(block, conditions, params)
    stage("bands", 0.3)
    bands = band_picking.pick(prepared, params, conditions.phase)
    wet = _wet_matrix(bands, conditions)
    findings = [*prepared.findings, *wet]
    unreadable = WET_REGIONS if wet else ()
    stage("groups", 0.45)
    declared = _declared(declared_structure, expected_groups)
    weighing = weigh_groups(
        prepared,
        bands,
        table,
        conditions,
        params,
        expected=declared,
        forbidden=forbidden_groups,
        tolerated=structures.tolerated_groups(declared) if declared else (),
        unreadable=unreadable,
    )
    findings += weighing.findings
    bands = tuple(replace(band, used_by=weighing.used_by.get(band, ())) for band in bands)

    stage("identity", 0.6)
    identity, impurities, curves, reference_findings = _against_reference(
        prepared, conditions, reference, watch, params, lambda: stage("impurities", 0.75)
    )
    findings += reference_findings
    stage("result", 0.95)
    masks = _masks(prepared, identity is not None, unreadable)
    body = _body(
        block,
        conditions,
        params,
        table,
        prepared,
        bands,
        weighing,
        findings,
        identity,
        impurities,
        declared_structure,
        masks,
        reference,
        watch,
    )
    digest = digest_of(body)
    stage("done", 1.0)
    return AnalysisResult(
        body=body,
        digest=digest,
        curves={**_own_curves(prepared), **curves},
        bands=bands,
        groups=weighing.claims,
        findings=tuple(findings),
        identity=identity,
        impurities=impurities,
    )


def digest_of(body: object) -> str:
    """SHA-256 (hex) over the canonical bytes of RFC 8785."""
    import rfc8785

    return hashlib.sha256(rfc8785.dumps(body)).hexdigest()


def _structure(smiles: str | None, table: GroupTable) -> dict[str, object] | None:
    if smiles is None:
        return None
    checked = structures.check_smiles(smiles)
    groups = structures.groups_with_atoms(smiles, table)
    return {"structure": checked, "groups": [g for g, atoms in groups if atoms], "atoms": dict(groups)}


def _declared(declared_structure: dict[str, object] | None, expected: tuple[str, ...]) -> frozenset[str] | None:
    if declared_structure is None:
        return frozenset(expected) if expected else None
    return frozenset(declared_structure["groups"]) | frozenset(expected)


def _wet_matrix(bands: tuple[Band, ...], conditions: Conditions) -> list[Finding]:
    """Moisture in a salt disc: a broad band near 3430 together with one near 1635 cm-1."""
    if conditions.technique is not Technique.DISC:
        return []
    stretch = [b for b in bands if 3350 <= b.position_cm1 <= 3520 and b.fwhm_cm1 > 120]
    bend = [b for b in bands if 1618 <= b.position_cm1 <= 1655 and b.fwhm_cm1 > 20]
    if not stretch or not bend:
        return []
    return [
        Finding(
            "measurement.wet_matrix",
            Severity.WARNING,
            f"A broad band at {stretch[0].position_cm1:.0f} cm-1 together with {bend[0].position_cm1:.0f} cm-1 is "
            "what a moist salt disc shows; O-H and N-H (3100-3700 and 1600-1660 cm-1) are not read for the groups.",
            region_cm1=(3100.0, 3700.0),
            remedy="Dry the salt and the specimen, press again, or use a mull.",
        )
    ]


def _against_reference(
    prepared: Prepared,
    conditions: Conditions,
    reference: ReferenceInput | None,
    watch: Sequence[WatchInput],
    params: MethodParams,
    between: Callable[[], None],
) -> tuple[Identity | None, Impurities | None, dict[str, np.ndarray], list[Finding]]:
    if reference is None:
        return None, None, {}, []
    findings: list[Finding] = []
    try:
        other = prepare(reference.block, reference.conditions, params)
    except CoreError as error:
        findings.append(
            Finding(
                "identity.reference_unusable",
                Severity.SERIOUS,
                f"The reference {reference.name} cannot be used: {error}",
                remedy=error.problem.remedy,
            )
        )
        return None, None, {}, findings
    compared, pair = identity_testing.compare(prepared, conditions, other, reference.conditions, reference.name, params)
    between()
    candidates = []
    for item in watch:
        try:
            candidates.append(
                impurity_screening.Candidate(item.name, prepare(item.block, item.conditions, params), item.conditions)
            )
        except CoreError as error:
            findings.append(
                Finding(
                    "impurities.component_unusable",
                    Severity.WARNING,
                    f"The watch-list spectrum {item.name} cannot be used: {error}",
                    remedy=error.problem.remedy,
                )
            )
    screened, laid = impurity_screening.screen(
        prepared, conditions, other, reference.conditions, tuple(candidates), params
    )
    if screened is not None:
        compared, screened = _in_agreement(compared, screened, params)
    curves: dict[str, np.ndarray] = {}
    if pair is not None:
        curves["reference"] = _onto(prepared.x_cm1, pair.x_cm1, pair.reference)
    if laid is not None:
        curves["reference"] = _onto(prepared.x_cm1, laid[0].x_cm1, laid[0].reference)
        curves["residual"] = _onto(prepared.x_cm1, laid[0].x_cm1, laid[1])
    return compared, screened, curves, findings


def _in_agreement(compared: Identity, screened: Impurities, params: MethodParams) -> tuple[Identity, Impurities]:
    """Identity and screening judge one fit, so neither may say good where the other says that something is wrong."""
    if compared.verdict == "consistent" and screened.explained_variance < params.explained_variance:
        doubt = (
            f"The bands agree, but the reference explains only {100 * screened.explained_variance:.1f} % of the sample "
            f"as a whole, less than {100 * params.explained_variance:.0f} %: something else absorbs beside it, or the "
            "measurement is at fault."
        )
        compared = replace(
            compared,
            verdict="consistent_with_differences",
            agrees="neutral",
            weight="open",
            against=(*compared.against, doubt),
            would_decide=("See to the findings of the measurement and record the sample again.",),
        )
    if compared.verdict == "not_consistent":
        doubt = "The sample is not consistent with the declared material, so an absence carries little here."
        screened = replace(
            screened,
            screened=tuple(
                replace(item, agrees="neutral", weight="open", against=(*item.against, doubt))
                if item.verdict == "not_found_above_limit"
                else item
                for item in screened.screened
            ),
        )
    return compared, screened


def _onto(grid: np.ndarray, x: np.ndarray, values: np.ndarray) -> np.ndarray:
    return np.interp(grid, x, values, left=np.nan, right=np.nan)


def _own_curves(prepared: Prepared) -> dict[str, np.ndarray]:
    return {
        "x_cm1": prepared.x_cm1,
        "absorbance": prepared.absorbance,
        "baseline": prepared.baseline,
        "corrected": prepared.corrected,
    }


def _masks(prepared: Prepared, compared: bool, unreadable: tuple[Mask, ...]) -> list[Mask]:
    masks = [*prepared.masks, *unreadable]
    low, high = CO2_REGION_CM1
    if compared and prepared.x_cm1[0] < low and prepared.x_cm1[-1] > high:
        masks.append(Mask(low, high, "carbon dioxide of the air: left out of identity and impurity figures"))
    return sorted(masks, key=lambda m: m.low_cm1)


def _body(
    block: SpectrumBlock,
    conditions: Conditions,
    params: MethodParams,
    table: GroupTable,
    prepared: Prepared,
    bands: tuple[Band, ...],
    weighing: GroupWeighing,
    findings: list[Finding],
    identity: Identity | None,
    impurities: Impurities | None,
    declared: dict[str, object] | None,
    masks: list[Mask],
    reference: ReferenceInput | None,
    watch: Sequence[WatchInput],
) -> dict[str, object]:
    body: dict[str, object] = {
        "schema": RESULT_SCHEMA,
        "findings": [_finding(item) for item in (*block.findings, *findings)],
        "axis": {
            "first_cm1": float(block.x_cm1[0]),
            "last_cm1": float(block.x_cm1[-1]),
            "points": len(block.x_cm1),
            "spacing_cm1": block.spacing_cm1,
            "declared_unit": block.axis_unit_declared or None,
        },
        "ordinate": {"declared": block.ordinate_declared or None, "used": block.ordinate_used.value},
        "conditions": {
            "technique": conditions.technique,
            "phase": conditions.phase,
            "resolution_cm1": stated_resolution_cm1(block, conditions),
        },
        "preparation": [{"step": s.step, "parameters": s.parameters} for s in prepared.steps],
        "noise_absorbance": prepared.noise_absorbance if prepared.noise_absorbance > 0 else None,
        "bands": bands,
        "groups": weighing.claims,
        "lanes": [
            {"group": lane.group, "label": lane.label, "verdict": lane.verdict, "windows": lane.windows}
            for lane in weighing.lanes
        ],
        "masked": masks,
        "versions": {
            "core": CORE_VERSION,
            "group_table": table.version,
            "group_table_digest": table.digest,
            "params_digest": digest_of(plain(params.to_dict())),
            "reference": (reference.label or reference.name) if reference else None,
            "watch": [item.label or item.name for item in watch],
        },
    }
    if identity is not None:
        body["identity"] = identity
    if impurities is not None:
        body["impurities"] = impurities
    if declared is not None:
        body["structure"] = _structure_section(declared, weighing)
    return plain(body)  # type: ignore[return-value]


def _finding(item: Finding) -> dict[str, object]:
    return {
        "code": item.code,
        "severity": item.severity,
        "message": item.message,
        "region_cm1": item.region_cm1,
        "line": item.line,
        "remedy": item.remedy,
    }


def _structure_section(declared: dict[str, object], weighing: GroupWeighing) -> dict[str, object]:
    checked: structures.Structure = declared["structure"]  # type: ignore[assignment]
    expected = set(declared["groups"])  # type: ignore[arg-type]
    classes = {claim.group for claim in weighing.claims if claim.members}
    tolerated = structures.tolerated_groups(expected)
    contradictions = []
    for claim in weighing.claims:
        if claim.group in classes or claim.group in tolerated:
            continue
        if claim.group in expected and claim.verdict == "contradicted":
            contradictions.append(
                {
                    "group": claim.group,
                    "kind": "expected_but_contradicted",
                    "message": f"The structure has {claim.label}, and the spectrum speaks against it.",
                }
            )
        elif claim.group not in expected and claim.verdict == "supported":
            message = f"The spectrum shows {claim.label}, which the structure does not have."
            if claim.group == "water":
                message += " Moisture or a hydrate would explain it."
            contradictions.append({"group": claim.group, "kind": "supported_but_not_expected", "message": message})
    return {
        "formula": checked.formula,
        "smiles_canonical": checked.smiles_canonical,
        "expected_groups": declared["groups"],
        "tolerated_groups": sorted(tolerated),
        "contradictions": contradictions,
        "degrees_of_unsaturation": checked.degrees_of_unsaturation,
        "notes": checked.notes,
        "drawing": {
            "atoms": checked.atoms,
            "bonds": checked.bonds,
            "group_atoms": {g: atoms for g, atoms in declared["atoms"].items() if atoms},
        },  # type: ignore[union-attr]
    }
