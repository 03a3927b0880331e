"""Phase, resolution, path and date of a header: only what stands there plainly."""

import pytest

from spectra.core.formats import stated


@pytest.mark.parametrize(
    ("text", "phase"),
    [
        ("gas", "gas"),
        ("GAS (150 mmHg, N2 ADDED, TOTAL PRESSURE 600 mmHg)", "gas"),
        ("VAPOR", "gas"),
        ("vapour\nNOTE: liquid below", "gas"),
        ("LIQUID (NEAT)", "liquid"),
        ("SOLUTION (10% IN CCl4)", "solution"),
        ("SOLID (KBr DISC)", "solid"),
        ("solid film", "film"),
        ("liquid film", "film"),
        ("crystalline powder", "solid"),
    ],
)
def test_a_plain_state_names_the_phase(text, phase):
    assert stated({"STATE": text})["phase"] == phase


@pytest.mark.parametrize("text", ["", "see notes", "AEROSOL", "gas over liquid", "(gas)", "solid or solution"])
def test_an_unclear_state_names_no_phase(text):
    assert stated({"STATE": text})["phase"] is None


@pytest.mark.parametrize(
    ("text", "resolution"),
    [("4", 4.0), ("0.4820", 0.482), ("2.", 2.0), ("2 CM^-^1", 2.0), ("1 CM^-^1 AT 4000", 1.0), ("2 cm-1", 2.0)],
)
def test_a_resolution_is_read_in_wavenumbers(text, resolution):
    assert stated({"RESOLUTION": text})["resolution_cm1"] == resolution


@pytest.mark.parametrize("text", ["", "0.0", "1000", "5 nm", "medium", "-4"])
def test_a_resolution_of_nothing_or_in_another_unit_is_none(text):
    assert stated({"RESOLUTION": text})["resolution_cm1"] is None


@pytest.mark.parametrize(
    ("text", "length_cm"),
    [("5 CM", 5.0), ("18 CM CELL", 18.0), ("0.1 mm", 0.01), ("25 um", 0.0025), ("10", None), ("long", None)],
)
def test_a_path_needs_its_unit(text, length_cm):
    assert stated({"PATHLENGTH": text})["path_length_cm"] == (
        length_cm if length_cm is None else pytest.approx(length_cm)
    )


def test_the_date_is_handed_on_in_the_words_of_the_file():
    assert stated({"DATE": "01/06/01"})["measured_date"] == "01/06/01"
    assert stated({"DATE": "98/10/1", "LONGDATE": "1998/10/01"})["measured_date"] == "1998/10/01"
    assert stated({"DATE": "unknown"})["measured_date"] is None


def test_an_empty_header_states_nothing():
    assert set(stated({}).values()) == {None}
    assert list(stated({})) == ["phase", "resolution_cm1", "path_length_cm", "measured_date"]
