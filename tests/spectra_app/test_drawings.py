"""The still drawings: a structure and a spectrum, each an SVG element of ours."""

from __future__ import annotations

import re
from xml.etree import ElementTree

import pytest

from spectra.core import formats, structure
from spectra.core.types import ReadOptions
from spectra.templatetags.drawing import _ticks, spectrum_drawing, structure_drawing
from tests.builders import jcamp_file

STRUCTURES = [
    "CCO",
    "c1ccncc1C(N)=O",
    "*CCCC(=O)OCC*",
    "[Na+].CC(=O)[O-]",
    "C#N",
    "O",
    "C",
    "[NH4+].[Cl-]",
    "C=C",
    "C1CC1=O",
]


@pytest.mark.parametrize("smiles", STRUCTURES)
def test_a_structure_is_well_formed_and_stays_inside_its_frame(smiles):
    drawn = structure_drawing(structure.check_smiles(smiles), "a <name>")
    root = ElementTree.fromstring(drawn)
    width, height = (float(part) for part in root.get("viewBox").split()[2:])
    for line in root.iter("line"):
        for name, limit in (("x1", width), ("x2", width), ("y1", height), ("y2", height)):
            assert 0 <= float(line.get(name)) <= limit
    assert "style" not in drawn


def test_heteroatoms_carry_their_hydrogens_and_charges():
    words = "".join(ElementTree.fromstring(structure_drawing(structure.check_smiles("[Na+].NCC(=O)[O-]"))).itertext())
    assert "Na+" in words
    assert "O−" in words
    assert "H2N" in words or "NH2" in words


def test_the_parts_of_a_salt_stand_apart():
    root = ElementTree.fromstring(structure_drawing(structure.check_smiles("[NH4+].[Cl-]")))
    left, right = sorted(float(text.get("x")) for text in root.iter("text"))
    assert right - left > 50


def test_a_double_bond_has_two_strokes_and_a_triple_bond_three():
    def strokes(smiles):
        return structure_drawing(structure.check_smiles(smiles)).count("<line")

    assert [strokes(text) for text in ("CC", "C=C", "C#C")] == [1, 2, 3]


def block_of(data: bytes):
    return formats.read(data, ReadOptions()).blocks[0]


def test_the_wavenumber_falls_to_the_right():
    drawn = spectrum_drawing(block_of(jcamp_file()))
    root = ElementTree.fromstring(drawn)
    points = [tuple(map(float, pair.split(","))) for pair in root.find("polyline").get("points").split()]
    assert points[0][0] > points[-1][0]
    labels = [text.text for text in root.iter("text")]
    assert "wavenumber / cm⁻¹" in labels
    assert "absorbance" in labels
    assert {"4000", "1000"} <= set(labels)


def test_the_strongest_band_survives_thinning():
    block = block_of(jcamp_file())
    points = re.search(r'points="([^"]+)"', spectrum_drawing(block))[1].split()
    assert len(points) <= 2 * 440
    highest = min(float(pair.split(",")[1]) for pair in points)
    assert highest < 25  # pixels from the top: the drawing leaves a twentieth of the range above the highest point


@pytest.mark.parametrize(
    ("low", "high"), [(0.0, 1.0), (-0.02, 0.9), (650.0, 4000.0), (1e-5, 3e-5), (99.2, 99.9), (0.0, 7.3)]
)
def test_ticks_are_few_round_and_inside(low, high):
    ticks = [float(text) for text in _ticks(low, high, most=8)]
    room = 0.05 * (high - low)
    assert 2 <= len(ticks) <= 9
    assert all(low - room <= tick <= high + room for tick in ticks)
