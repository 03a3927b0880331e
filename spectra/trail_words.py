"""How the trail's pages say what this layer records: the laboratory's words in place of stored ones."""

from __future__ import annotations

from functools import lru_cache

from labsite.trail.events import in_words
from labsite.trail.words import register_words
from spectra import selectors_master
from spectra.core import group_table
from spectra.models import Activity, CheckVerdict, PhaseChoices, ReviewMode, SampleKind, SpectrumRole, TechniqueChoices

LABELS = {
    "against_the_header": "Against the file's header",
    "already_in_store": "Bytes already in the store",
    "analysis": "Analysis number",
    "arrays_sha256": "Hash of the values read",
    "atr_angle_deg": "Angle of incidence",
    "atr_crystal_index": "Refractive index of the crystal",
    "atr_reflections": "Number of reflections",
    "block": "Spectrum in the file",
    "composition_note": "Hydrate, counter-ion or mixture",
    "containers_total": "Containers in all",
    "core_version": "Version of the computation",
    "curves_sha256": "Hash of the curves",
    "declared": "Declared as",
    "due_on": "Due on",
    "high_cm1": "Range ends at",
    "low_cm1": "Range begins at",
    "not_separable_from": "Cannot be told apart from",
    "material_version": "Version of the material",
    "procedure_number": "Procedure",
    "result_digest": "Hash of the result",
    "review_mode": "Second reading",
    "sampled_containers": "Containers sampled",
    "serial": "Serial number",
    "size_bytes": "Size",
    "smiles": "Structure (SMILES)",
}
ORDINATES = {
    "percent_transmittance": "transmittance in per cent",
    "transmittance": "transmittance as a fraction",
    "reflectance": "reflectance as a fraction",
}
QUESTIONS = {"x_unit": "unit of the axis", "ordinate": "what the values are", "columns": "which columns are spectra"}


@lru_cache(maxsize=1)
def _shipped_names() -> dict[str, str]:
    table = group_table.load(selectors_master.shipped_group_table())
    return {group.id: group.name for group in table.groups}


def group_name(identifier: str) -> str:
    """A functional group by its name in the shipped table; a group of another table by its identifier in words."""
    return _shipped_names().get(identifier, identifier.replace("_", " "))


def _counted_from_one(index: str) -> str:
    return f"number {int(index) + 1}" if index.isdecimal() else index


def _finding(code: str) -> str:
    return in_words(code).lower()


def register() -> None:
    register_words(
        labels=LABELS,
        values={
            "activity": dict(Activity.choices),
            "block": _counted_from_one,
            "expected_groups": group_name,
            "findings": _finding,
            "forbidden_groups": group_name,
            "kind": dict(SampleKind.choices),
            "ordinate": ORDINATES,
            "phase": dict(PhaseChoices.choices),
            "question": QUESTIONS,
            "review_mode": dict(ReviewMode.choices),
            "role": dict(SpectrumRole.choices),
            "technique": dict(TechniqueChoices.choices),
            "verdict": dict(CheckVerdict.choices),
        },
    )
