"""One analysis from its stored inputs: no row is written here. The same rows and bytes give the same result."""

from __future__ import annotations

import hashlib
import platform
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from importlib.metadata import version

import rfc8785

from spectra import arrays, store
from spectra.core import formats, group_table, pipeline
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.types import Conditions, Phase, SpectrumBlock, Technique
from spectra.core.version import CORE_VERSION
from spectra.models import Analysis, MaterialVersion, Reference, Spectrum
from spectra.reading import read_options


@dataclass(frozen=True)
class Outcome:
    result: dict
    result_bytes: bytes
    digest: str
    curves: bytes
    core_version: str
    environment: dict[str, str]


@lru_cache(maxsize=8)
def parsed_table(digest: str, text: str) -> group_table.GroupTable:
    return group_table.load(text)


def read_block(raw_sha256: str, block_index: int, answers: dict, technique: str) -> SpectrumBlock:
    """The block as the strict reader gives it today from the stored bytes."""
    result = formats.read(store.get(raw_sha256), read_options(answers, technique))
    for block in result.blocks:
        if block.index == block_index and isinstance(block, SpectrumBlock):
            return block
    problem = result.problem or next((b.problem for b in result.blocks if b.index == block_index), None)
    raise CoreError(
        problem.code if problem else "reader.block_missing",
        problem.message if problem else f"Block {block_index + 1} is not in the file any more.",
    )


def spectrum_block(spectrum: Spectrum) -> SpectrumBlock:
    """The spectrum's arrays, checked against what was read when it was brought in."""
    upload = spectrum.upload
    block = read_block(upload.raw_file.sha256, spectrum.block_index, upload.answers, spectrum.technique)
    if arrays.block_digest(block) != spectrum.arrays_sha256:
        raise CoreError(
            "reader.arrays_differ",
            "The reader gives other numbers from these bytes than on the day of the upload.",
            remedy="Compare the code versions; the raw file itself is unchanged.",
        )
    return block


def reference_block(reference: Reference) -> SpectrumBlock:
    return read_block(reference.raw_file.sha256, reference.block_index, reference.answers, reference.technique)


def conditions_of(spectrum: Spectrum, material: MaterialVersion) -> Conditions:
    return Conditions(
        technique=Technique(spectrum.technique),
        phase=Phase(material.phase),
        resolution_cm1=spectrum.resolution_cm1,
        atr_crystal_index=spectrum.atr_crystal_index,
        atr_angle_deg=spectrum.atr_angle_deg,
        atr_reflections=spectrum.atr_reflections,
        already_processed=spectrum.already_processed,
    )


def reference_conditions(reference: Reference) -> Conditions:
    return Conditions(
        technique=Technique(reference.technique),
        phase=Phase(reference.phase),
        resolution_cm1=reference.resolution_cm1,
        atr_crystal_index=reference.atr_crystal_index,
        atr_angle_deg=reference.atr_angle_deg,
        atr_reflections=reference.atr_reflections,
    )


def environment() -> dict[str, str]:
    """What the numbers were made with, for the day somebody computes them again."""
    packages = {name: version(name) for name in ("numpy", "scipy", "pybaselines", "rdkit")}
    return {"python": platform.python_version(), "machine": platform.machine(), **packages}


def compute(analysis: Analysis, *, progress: Callable[[str, float], None] | None = None) -> Outcome:
    """Read, analyse, and pack. Raises CoreError where the input cannot carry an analysis."""
    material = analysis.material_version
    block = spectrum_block(analysis.spectrum)
    reference = None
    if analysis.reference is not None:
        reference = pipeline.ReferenceInput(
            name=f"{analysis.reference.code} {analysis.reference.name}",
            block=reference_block(analysis.reference),
            conditions=reference_conditions(analysis.reference),
            label=analysis.reference.raw_file.sha256,
        )
    watch = []
    if analysis.watch_list is not None:
        for item in analysis.watch_list.items.all():
            watch.append(
                pipeline.WatchInput(
                    name=item.name,
                    block=reference_block(item.reference),
                    conditions=reference_conditions(item.reference),
                    label=item.reference.raw_file.sha256,
                )
            )
    result = pipeline.analyse(
        block,
        conditions=conditions_of(analysis.spectrum, material),
        params=MethodParams.from_dict(analysis.method.parameters),
        table=parsed_table(analysis.group_table.digest, analysis.group_table.text),
        reference=reference,
        watch=tuple(watch),
        smiles=material.smiles or material.repeat_unit or None,
        expected_groups=tuple(material.expected_groups),
        forbidden_groups=tuple(material.forbidden_groups),
        progress=progress,
    )
    # What the verdicts were held against belongs to the result: the material's record may have moved on by then.
    document = result.to_json() | {
        "declared": {
            "expected_groups": list(material.expected_groups),
            "forbidden_groups": list(material.forbidden_groups),
        }
    }
    data = rfc8785.dumps(document)
    return Outcome(
        result=document,
        result_bytes=data,
        digest=hashlib.sha256(data).hexdigest(),
        curves=arrays.pack_curves(result.curves),
        core_version=CORE_VERSION,
        environment=environment(),
    )
