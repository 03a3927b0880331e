"""The declared structure: formula, degrees of unsaturation, expected groups and a drawing, all from one SMILES.

RDKit is imported on first use. The text is bounded before it is parsed because long ring strings take minutes.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import lru_cache

from spectra.core.errors import CoreError
from spectra.core.group_table import GroupTable

LARGEST_TEXT = 1000
LARGEST_ATOMS = 300


@dataclass(frozen=True)
class Atom:
    """One atom of the drawing; coordinates in bond lengths of about 1.5, y upwards."""

    symbol: str
    x: float
    y: float
    charge: int
    hydrogens: int


@dataclass(frozen=True)
class Bond:
    """One bond of the drawing between atom indices; order 1, 2, 3 or 1.5 (aromatic)."""

    start: int
    end: int
    order: float


@dataclass(frozen=True)
class Structure:
    """A checked structure. `degrees_of_unsaturation` is None for salts and mixtures, where the count says nothing."""

    text: str
    smiles_canonical: str
    formula: str
    degrees_of_unsaturation: float | None
    atoms: tuple[Atom, ...]
    bonds: tuple[Bond, ...]
    components: int
    notes: tuple[str, ...] = ()


def degrees_of_unsaturation(formula: str) -> float:
    """(2C + 2 + N + P - H - X) / 2 for a formula such as C8H10N4O2; a half-integer means an ion, a radical or an error.

    Raises CoreError where the text is no formula.
    """
    if not formula or len(formula) > 200 or not re.fullmatch(r"(?:[A-Z][a-z]?\d*)+", formula):
        raise CoreError("structure.formula", "The formula cannot be read.", remedy="Write it like C8H10N4O2.")
    counts: dict[str, int] = {}
    for symbol, number in re.findall(r"([A-Z][a-z]?)(\d*)", formula):
        counts[symbol] = counts.get(symbol, 0) + int(number or 1)
    tetravalent = counts.get("C", 0) + counts.get("Si", 0)
    trivalent = counts.get("N", 0) + counts.get("P", 0) + counts.get("B", 0)
    monovalent = sum(counts.get(symbol, 0) for symbol in ("H", "D", "F", "Cl", "Br", "I"))
    return (2 * tetravalent + 2 + trivalent - monovalent) / 2


def check_smiles(text: str) -> Structure:
    """Parse, judge and lay out a SMILES; `*` marks the ends of a repeat unit.

    Raises CoreError (`structure.*`) for white space, trailing names, texts or structures that are too large and
    structures that cannot exist.
    """
    molecule = _parse(text)
    from rdkit import Chem
    from rdkit.Chem import rdDepictor
    from rdkit.Chem.rdMolDescriptors import CalcMolFormula

    canonical = Chem.MolToSmiles(molecule)
    drawn = Chem.Mol(molecule)
    rdDepictor.Compute2DCoords(drawn, canonOrient=True)
    conformer = drawn.GetConformer()
    atoms = []
    for atom in drawn.GetAtoms():
        place = conformer.GetAtomPosition(atom.GetIdx())
        atoms.append(
            Atom(atom.GetSymbol(), round(place.x, 4), round(place.y, 4), atom.GetFormalCharge(), atom.GetTotalNumHs())
        )
    bonds = tuple(
        Bond(b.GetBeginAtomIdx(), b.GetEndAtomIdx(), float(b.GetBondTypeAsDouble())) for b in drawn.GetBonds()
    )
    components = len(Chem.GetMolFrags(molecule))
    repeat = any(atom.GetAtomicNum() == 0 for atom in molecule.GetAtoms())
    charged = any(atom.GetFormalCharge() for atom in molecule.GetAtoms())
    formula = CalcMolFormula(molecule)
    notes = []
    unsaturation = None
    if repeat:
        notes.append("Repeat unit: its ends are open, so the formula is that of the unit.")
    if components > 1:
        notes.append(f"{components} separate parts: salt, hydrate or mixture.")
    if components == 1 and not repeat and not (charged and Chem.GetFormalCharge(molecule)):
        unsaturation = degrees_of_unsaturation(re.sub(r"[+-]\d*$", "", formula))
    return Structure(text, canonical, formula, unsaturation, tuple(atoms), bonds, components, tuple(notes))


def expected_groups(text: str, table: GroupTable) -> tuple[str, ...]:
    """Identifiers of the table's groups that the structure has, in the table's order."""
    return tuple(group for group, atoms in groups_with_atoms(text, table) if atoms)


def groups_with_atoms(text: str, table: GroupTable) -> tuple[tuple[str, tuple[int, ...]], ...]:
    """For each group of the table the atom indices that carry it (empty: the structure does not have it)."""
    molecule = _parse(text)
    size = molecule.GetNumAtoms()
    matched = _joined_units(molecule)
    result = []
    for group in table.groups:
        atoms: set[int] = set()
        for pattern in _patterns(group.id, group.smarts):
            for match in matched.GetSubstructMatches(pattern, maxMatches=500):
                atoms.update(index % size for index in match)
        result.append((group.id, tuple(sorted(atoms))))
    return tuple(result)


def _joined_units(molecule: object) -> object:
    """Two repeat units joined head to tail, so that a group across the junction is seen; other structures unchanged."""
    from rdkit import Chem

    ends = [atom.GetIdx() for atom in molecule.GetAtoms() if atom.GetAtomicNum() == 0]
    if len(ends) != 2 or any(molecule.GetAtomWithIdx(i).GetDegree() != 1 for i in ends):
        return molecule
    size = molecule.GetNumAtoms()
    inner = [molecule.GetAtomWithIdx(i).GetNeighbors()[0].GetIdx() for i in ends]
    pair = Chem.RWMol(Chem.CombineMols(molecule, molecule))
    # The tail dummy of the first unit and the head dummy of the second give way to one bond; indices stay in place.
    pair.RemoveBond(inner[1], ends[1])
    pair.RemoveBond(size + ends[0], size + inner[0])
    pair.AddBond(inner[1], size + inner[0], Chem.BondType.SINGLE)
    joined = pair.GetMol()
    Chem.SanitizeMol(joined)
    return joined


def tolerated_groups(expected: set[str] | frozenset[str]) -> frozenset[str]:
    """Groups that may appear, or fail to, although the drawing says otherwise.

    A molecule drawn with acid and amine is a zwitterion in the solid (carboxylate and ammonium); an acid with a base
    anywhere in the structure may have given its proton away.
    """
    amines = {"amine_primary", "amine_secondary"}
    if "carboxylic_acid" in expected and (amines & expected or "ammonium" in expected):
        return frozenset({"carboxylic_acid", "carboxylate", "ammonium", *amines})
    if "carboxylate" in expected and amines & expected:
        return frozenset({"carboxylic_acid", "ammonium", *amines})
    return frozenset()


@lru_cache(maxsize=512)
def _patterns(group_id: str, smarts: tuple[str, ...]) -> tuple[object, ...]:
    from rdkit import Chem, RDLogger

    RDLogger.DisableLog("rdApp.*")
    patterns = []
    for text in smarts:
        pattern = Chem.MolFromSmarts(text)
        if pattern is None:
            raise CoreError(
                "group_table.smarts",
                f"group {group_id}: the SMARTS {text!r} cannot be read.",
                remedy="Correct the pattern.",
            )
        patterns.append(pattern)
    return tuple(patterns)


def _parse(text: str) -> object:
    if not isinstance(text, str) or not text:
        raise CoreError("structure.empty", "No structure was given.", remedy="Enter a SMILES, or leave the field out.")
    if len(text) > LARGEST_TEXT:
        raise CoreError(
            "structure.too_long",
            f"The SMILES holds {len(text)} characters; {LARGEST_TEXT} are allowed.",
            remedy="Enter the repeat unit or a smaller structure.",
        )
    if re.search(r"\s", text):
        raise CoreError(
            "structure.white_space",
            "The SMILES holds white space; a name behind it is not accepted.",
            remedy="Enter the SMILES alone.",
        )
    if not re.fullmatch(r"[A-Za-z0-9@+\-\[\]()=#$:/\\.%*~]+", text):
        raise CoreError(
            "structure.characters", "The SMILES holds a character that no SMILES has.", remedy="Enter the SMILES alone."
        )
    rough_atoms = len(re.findall(r"\[[^\]]*\]|Cl|Br|[BCNOPSFIbcnops*]", text))
    if rough_atoms > LARGEST_ATOMS:
        raise CoreError(
            "structure.too_large",
            f"The structure has about {rough_atoms} atoms; {LARGEST_ATOMS} are allowed.",
            remedy="Enter the repeat unit or a smaller structure.",
        )
    from rdkit import Chem, RDLogger

    RDLogger.DisableLog("rdApp.*")
    parameters = Chem.SmilesParserParams()
    parameters.parseName = False
    parameters.allowCXSMILES = False
    parameters.sanitize = False
    molecule = Chem.MolFromSmiles(text, parameters)
    if molecule is None or molecule.GetNumAtoms() == 0:
        raise CoreError("structure.syntax", "The SMILES cannot be read.", remedy="Check brackets, rings and symbols.")
    problems = Chem.DetectChemistryProblems(molecule)
    if problems:
        raise CoreError(
            "structure.impossible",
            f"The structure cannot exist: {problems[0].Message()}.",
            remedy="Check valences and charges.",
        )
    Chem.SanitizeMol(molecule)
    return molecule
