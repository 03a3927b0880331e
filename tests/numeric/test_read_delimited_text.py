"""Delimited text: separators, decimal signs, headers, several columns; what is not stated is asked."""

import numpy as np
import pytest

from spectra.core.formats import read
from spectra.core.types import AxisUnit, Ordinate, ReadOptions, RefusedBlock

POSITIONS = np.linspace(4000.0, 400.0, 121)
ABSORBANCE = 0.05 + 0.7 * np.exp(-(((POSITIONS - 1650) / 80) ** 2))


def table(separator=",", decimal=".", header="cm-1,absorbance", columns=1, ending=""):
    rows = []
    for position, value in zip(POSITIONS, ABSORBANCE, strict=True):
        words = [f"{position:.3f}"] + [f"{value * (column + 1):.6f}" for column in range(columns)]
        rows.append(separator.join(word.replace(".", decimal) for word in words) + ending)
    return (header + "\n" * bool(header) + "\n".join(rows) + "\n").encode("utf-8")


@pytest.mark.parametrize(
    ("separator", "decimal", "header"),
    [
        (",", ".", "cm-1,absorbance"),
        (", ", ".", '"cm-1","absorbance"'),
        (";", ".", "cm-1;absorbance"),
        (";", ",", "Wellenzahl / cm-1;Absorbance"),
        (" ; ", ",", "cm-1;A"),
        ("\t", ".", "wavenumber (cm-1)\tabs"),
        ("\t", ",", "wavenumber (cm-1)\tabsorbance units"),
        (" ", ".", "cm-1 absorbance"),
        ("   ", ",", "# x units: cm-1\n# y units: absorbance"),
        (",", ".", "title: film\n\nwavenumber,signal\ncm-1,absorbance"),
        (",", ".", "cm-1,absorbance\nsample,lot 5"),
    ],
)
def test_every_usual_layout_is_read(separator, decimal, header):
    (block,) = read(table(separator, decimal, header)).blocks
    assert np.allclose(block.x_cm1, POSITIONS[::-1], atol=5e-4) and np.allclose(block.y, ABSORBANCE[::-1], atol=5e-7)
    assert (
        block.ordinate_used is Ordinate.ABSORBANCE
        and block.coding == "delimited"
        and not block.self_checking
        and block.evenly_spaced
    )


@pytest.mark.parametrize(
    "header", ["", "wavenumber,absorbance", "resolution,4 cm-1\nx,absorbance", "measured at 4 cm-1"]
)
def test_a_unit_that_the_file_does_not_state_is_asked(header):
    problem = read(table(header=header)).problem
    assert (problem.code, problem.question) == ("reader.x_unit_unknown", "x_unit")
    answered = read(table(header=header), ReadOptions(x_unit=AxisUnit.CM1, ordinate=Ordinate.ABSORBANCE)).blocks[0]
    assert np.allclose(answered.y, ABSORBANCE[::-1], atol=5e-7)


@pytest.mark.parametrize("header", ["cm-1,sample 12", "measured in transmission\ncm-1,y", "cm-1,"])
def test_an_ordinate_that_the_file_does_not_state_is_asked(header):
    (block,) = read(table(header=header)).blocks
    assert isinstance(block, RefusedBlock) and block.problem.question == "ordinate"


def test_each_ordinate_column_is_a_spectrum():
    data = table(header="absorbance\ncm-1,lot 1,lot 2,lot 3", columns=3)
    blocks = read(data).blocks
    assert [block.title for block in blocks] == ["lot 1", "lot 2", "lot 3"]
    for factor, block in enumerate(blocks, 1):
        assert np.allclose(block.y, factor * ABSORBANCE[::-1], atol=5e-6)
    (second,) = read(data, ReadOptions(columns=(3,))).blocks
    assert np.array_equal(second.y, blocks[1].y)


def test_columns_of_unlike_names_are_asked_about():
    data = table(header="cm-1,absorbance,temperature", columns=2)
    assert read(data).problem.question == "columns"
    (block,) = read(data, ReadOptions(columns=(2,))).blocks
    assert block.ordinate_used is Ordinate.ABSORBANCE


@pytest.mark.parametrize("column", [1, 0, 4, -1])
def test_a_column_that_is_not_there_is_refused(column):
    assert (
        read(table(columns=2, header="cm-1,a,a"), ReadOptions(columns=(column,))).problem.code
        == "reader.column_unknown"
    )


def test_a_closing_separator_and_comments_below_the_header_do_no_harm():
    data = table(ending=",").replace(b"\n3970", b"\n# pause\n3970", 1)
    assert len(read(data).blocks[0].y) == len(POSITIONS)


def test_wavelengths_become_wavenumbers():
    rows = "\n".join(f"{1e4 / position:.9f};{value:.6f}" for position, value in zip(POSITIONS, ABSORBANCE, strict=True))
    (block,) = read(f"wavelength (\N{MICRO SIGN}m);absorbance\n{rows}".encode("latin-1")).blocks
    assert np.allclose(block.x_cm1, POSITIONS[::-1], rtol=1e-7) and not block.evenly_spaced


def test_percent_is_kept_in_percent():
    rows = "\n".join(
        f"{position},{100 * 10**-value:.5f}" for position, value in zip(POSITIONS, ABSORBANCE, strict=True)
    )
    (block,) = read(f"cm-1,%T\n{rows}".encode()).blocks
    assert block.ordinate_used is Ordinate.PERCENT_TRANSMITTANCE and block.y.max() > 80


def test_a_number_beyond_the_range_of_numbers_is_refused():
    assert read(table().replace(b"0.050000", b"1e999", 1)).problem.code == "reader.number_too_large"
