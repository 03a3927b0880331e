"""What is exported reads back bit for bit, here and in the PyPI reader `jcamp`."""

import contextlib
import io

import numpy as np
import pytest

from spectra.core.errors import CoreError
from spectra.core.formats import read
from spectra.core.formats.writer import write_delimited, write_jcamp
from spectra.core.types import Ordinate, ReadOptions, Severity
from tests import outside

X = np.linspace(400.0, 4000.0, 1801)
WHOLE = np.rint(9000 - 8000 * np.exp(-(((X - 1700) / 40) ** 2)))
UNEVEN = np.sort(1e4 / np.linspace(2.5, 25.0, 500))


def read_by_jcamp(data):
    import jcamp

    with contextlib.redirect_stdout(io.StringIO()) as said:
        spectrum = jcamp.read(io.BytesIO(data))
    assert said.getvalue() == ""
    order = np.argsort(spectrum["x"])
    return spectrum["x"][order], spectrum["y"][order]


@pytest.mark.parametrize(
    ("x", "y", "form"),
    [
        (X, WHOLE / 4096, "DIFDUP"),
        (X, WHOLE / 9000, "AFFN"),
        (X, -WHOLE / 3e7, "AFFN"),
        (X, WHOLE - 5000, "DIFDUP"),
        (X, np.zeros_like(X), "DIFDUP"),
        (UNEVEN, np.sin(UNEVEN), "AFFN"),
    ],
)
def test_what_is_written_reads_back_bit_for_bit(x, y, form):
    data = write_jcamp("made up", x, y, Ordinate.ABSORPTIVITY, form)
    assert max(map(len, data.split(b"\n"))) <= 80
    (block,) = read(data).blocks
    assert block.x_cm1.tobytes() == x.tobytes() and np.array_equal(block.y, y)
    assert block.coding == {"DIFDUP": "DIFDUP", "AFFN": "XY" if x is UNEVEN else block.coding}[form]
    assert {finding.severity for finding in block.findings} <= {Severity.INFO}
    assert block.self_checking == (form == "DIFDUP")
    their_x, their_y = read_by_jcamp(data)
    assert np.array_equal(their_x, x) and np.array_equal(their_y, y)


@pytest.mark.parametrize("ordinate", list(Ordinate))
def test_every_kind_of_ordinate_comes_back_as_itself(ordinate):
    y = WHOLE / 8192 * (100 if ordinate is Ordinate.PERCENT_TRANSMITTANCE else 1)
    answers = ReadOptions(ordinate=Ordinate.REFLECTANCE) if ordinate is Ordinate.REFLECTANCE else ReadOptions()
    for data in (write_jcamp("t", X, y, ordinate), write_delimited(X, y, ordinate)):
        (block,) = read(data, answers).blocks
        assert block.ordinate_used is ordinate and np.array_equal(block.y, y) and np.array_equal(block.x_cm1, X)


def test_real_spectra_survive_export_bit_for_bit():
    exact = 0
    for spectrum in outside.open_collection():
        block = read(spectrum.data).blocks[spectrum.block]
        factor = float(block.headers["YFACTOR"])
        for form in ("AFFN", "DIFDUP"):
            try:
                data = write_jcamp(block.title, block.x_cm1, block.y, block.ordinate_used, form, factor)
            except CoreError as refusal:
                assert refusal.problem.code == "writer.not_exact" and form == "DIFDUP"
                continue
            again = read(data).blocks[0]
            assert np.array_equal(again.y, block.y) and np.array_equal(again.x_cm1, block.x_cm1), (
                spectrum.file_name,
                form,
            )
            assert again.ordinate_used is block.ordinate_used
            their_x, their_y = read_by_jcamp(data)
            assert np.array_equal(their_y, block.y) and np.allclose(their_x, block.x_cm1, rtol=1e-12), (
                spectrum.file_name,
                form,
            )
            exact += 1
    assert exact >= 91 + 50


def test_ordinates_that_difference_form_cannot_carry_are_refused():
    for x, y in ((X, np.sin(X)), (UNEVEN, np.zeros_like(UNEVEN))):
        with pytest.raises(CoreError) as refusal:
            write_jcamp("t", x, y, Ordinate.ABSORBANCE, "DIFDUP")
        assert refusal.value.problem.code == "writer.not_exact"


def test_a_title_cannot_break_out_of_its_label():
    (block,) = read(write_jcamp("a\n##END=\n$$ b", X, WHOLE / 9000, Ordinate.ABSORBANCE)).blocks
    assert block.title == "a ##END=  b" and len(block.y) == len(X)


def test_an_unknown_form_is_refused():
    with pytest.raises(CoreError) as refusal:
        write_jcamp("t", X, WHOLE, Ordinate.ABSORBANCE, "PAC")
    assert refusal.value.problem.code == "writer.form_unknown"
