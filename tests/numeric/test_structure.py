"""The declared structure: read within bounds, judged, and turned into expected groups."""

import time
from pathlib import Path

import pytest

from spectra.core.errors import CoreError
from spectra.core.group_table import load
from spectra.core.structure import check_smiles, expected_groups, groups_with_atoms, tolerated_groups

TABLE = load((Path(__file__).resolve().parents[2] / "fixtures" / "group_table" / "version_1.toml").read_text("utf-8"))


@pytest.mark.parametrize(
    "text, code",
    [
        ("", "empty"),
        ("CCO ethanol", "white_space"),
        ("CCO\n", "white_space"),
        ("C(C", "syntax"),
        ("C(C)(C)(C)(C)C", "impossible"),
        ("C" * 301, "too_large"),
        ("C" * 1001, "too_long"),
        ("C1CC", "syntax"),
        ("<b>", "characters"),
        ("CCO|$a$|", "characters"),
        ("c1cccc1", "impossible"),
    ],
)
def test_what_cannot_be_a_structure_is_refused(text, code):
    with pytest.raises(CoreError) as caught:
        check_smiles(text)
    assert caught.value.problem.code == f"structure.{code}"
    assert caught.value.problem.remedy


def test_a_long_ring_text_is_refused_at_once():
    started = time.monotonic()
    with pytest.raises(CoreError):
        check_smiles("C1" * 450 + "C")
    assert time.monotonic() - started < 5


def test_formula_unsaturation_and_drawing():
    found = check_smiles("CC(=O)Oc1ccccc1C(=O)O")
    assert found.formula == "C9H8O4" and found.degrees_of_unsaturation == 6
    assert len(found.atoms) == 13 and len(found.bonds) == 13
    assert len({(atom.x, atom.y) for atom in found.atoms}) == 13


@pytest.mark.parametrize(
    "text, groups",
    [
        ("CCOC(C)=O", {"alkane_ch", "ester"}),
        ("CC(C)=O", {"alkane_ch", "ketone"}),
        ("CCC=O", {"alkane_ch", "aldehyde"}),
        ("CC(=O)O", {"alkane_ch", "carboxylic_acid"}),
        ("CC#N", {"alkane_ch", "nitrile"}),
        ("Oc1ccccc1", {"aromatic", "phenol_oh"}),
        ("CCOCC", {"alkane_ch", "ether"}),
        ("C1CO1", {"alkane_ch", "epoxide"}),
        ("CC(=O)N", {"alkane_ch", "amide"}),
        ("CN=C=O", {"alkane_ch", "isocyanate"}),
        ("OCC(O)CO", {"alkane_ch", "alcohol_oh", "polyol"}),
        ("CC(=O)Cl", {"alkane_ch", "acid_chloride"}),
        ("O=[N+]([O-])c1ccccc1", {"aromatic", "nitro"}),
        ("C[N+](=O)[O-]", {"alkane_ch", "nitro"}),
        ("O=C1CCCO1", {"alkane_ch", "lactone", "ester"}),
        ("CC(=O)[O-].[Na+]", {"alkane_ch", "carboxylate"}),
        ("COC(=O)OC", {"alkane_ch", "carbonate_ester"}),
        ("O=C1CCCN1", {"alkane_ch", "lactam"}),
        ("CC(=O)OC(C)=O", {"alkane_ch", "anhydride"}),
        ("ClCCl", {"alkane_ch", "c_cl"}),
    ],
)
def test_expected_groups_of_simple_structures(text, groups):
    assert set(expected_groups(text, TABLE)) == groups


def test_a_repeat_unit_shows_the_group_across_its_ends():
    assert "carbonate_ester" in expected_groups("*Oc1ccc(cc1)C(C)(C)c1ccc(cc1)OC(*)=O", TABLE)
    assert "ester" in expected_groups("*OCCOC(=O)c1ccc(cc1)C(*)=O", TABLE)
    assert set(expected_groups("*CC(*)c1ccccc1", TABLE)) == {"alkane_ch", "aromatic"}


def test_atoms_of_a_group_are_those_of_the_drawing():
    found = check_smiles("CCOC(C)=O")
    atoms = dict(groups_with_atoms("CCOC(C)=O", TABLE))["ester"]
    assert {found.atoms[i].symbol for i in atoms} == {"C", "O"}


def test_an_amino_acid_may_be_a_zwitterion():
    assert {"carboxylate", "ammonium", "carboxylic_acid", "amine_primary"} <= tolerated_groups(
        set(expected_groups("NCC(=O)O", TABLE))
    )
    assert not tolerated_groups(set(expected_groups("CC(=O)O", TABLE)))


def test_salts_and_mixtures_give_no_unsaturation():
    assert check_smiles("CC(=O)[O-].[Na+]").degrees_of_unsaturation is None
    assert check_smiles("*CC*").degrees_of_unsaturation is None
