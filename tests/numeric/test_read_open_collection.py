"""The readers on measured spectra: the open collection in the source archive of the PyPI package `jcamp` 1.3.2.

What each file holds (points, axis, coding) was found by an independent strict reader; see fixtures/truth.
"""

import contextlib
import hashlib
import io
import re

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from spectra.core.formats import read
from spectra.core.formats.asdf import decode_table
from spectra.core.types import Ordinate, ReadOptions, RefusedBlock, Severity, SpectrumBlock
from tests import outside
from tests.bench.bench_reading import as_infrared


def block_of(name, number=0, options=ReadOptions()):  # noqa: B008 - frozen
    block = read(outside.collection_file(name), options).blocks[number]
    assert isinstance(block, SpectrumBlock), block
    return block


def block_of_figures(name):
    """A published test table of another technique, read under an infrared header."""
    return read(as_infrared(outside.collection_file(name)), ReadOptions(ordinate=Ordinate.ABSORPTIVITY)).blocks[0]


def codes(block):
    return {finding.code for finding in block.findings}


def test_all_91_infrared_spectra_of_86_files_are_read():
    spectra = outside.open_collection()
    assert len(spectra) == 91 and len({spectrum.file_sha256 for spectrum in spectra}) == 86
    for spectrum in spectra:
        result = read(spectrum.data)
        block = result.blocks[spectrum.block]
        assert isinstance(block, SpectrumBlock), (spectrum.file_name, block)
        assert result.sha256 == spectrum.file_sha256
        assert len(block.y) == spectrum.points, spectrum.file_name
        assert block.x_cm1[[0, -1]] == pytest.approx([spectrum.low_cm1, spectrum.high_cm1], abs=6e-4), (
            spectrum.file_name
        )
        forms = {"DIFDUP": "DIF+DUP+SQZ", "DIF": "DIF+SQZ", "SQZ": "DUP+SQZ"}
        assert forms.get(block.coding, block.coding) in (spectrum.coding, *spectrum.coding.split("+")), (
            spectrum.file_name
        )


def test_every_warning_names_what_was_declared_and_what_was_decoded():
    for spectrum in outside.open_collection():
        for finding in read(spectrum.data).blocks[spectrum.block].findings:
            if finding.code.endswith("_differs") or finding.code in (
                "reader.x_labels_shifted",
                "reader.values_in_percent",
            ):
                assert {"label", "declared", "decoded"} <= set(finding.facts) and finding.line, (
                    spectrum.file_name,
                    finding,
                )


def test_files_of_other_techniques_are_refused_by_name():
    infrared = {spectrum.file_sha256 for spectrum in outside.open_collection()}
    refused = 0
    for name, data in outside.collection_files().items():
        if hashlib.sha256(data).hexdigest() in infrared:
            continue
        result = read(data)
        if not name.endswith("DX-DIR.TXT"):
            assert result.blocks and all(isinstance(block, RefusedBlock) for block in result.blocks), name
            assert {block.problem.code for block in result.blocks} <= {
                "reader.other_technique",
                "reader.data_type_missing",
            }, name
            refused += 1
        else:
            assert result.problem.code == "reader.not_recognised"
    assert refused == 59


def test_the_spliced_file_is_refused_even_under_an_infrared_header():
    data = outside.collection_file("xyinc2.jdx")
    assert read(data).blocks[0].problem.code == "reader.other_technique"
    problem = read(as_infrared(data), ReadOptions(ordinate=Ordinate.ABSORPTIVITY)).blocks[0].problem
    assert problem.code == "reader.points_added" and problem.line == 35


def test_one_table_in_three_forms_decodes_to_the_same_figures():
    blocks = [block_of_figures(name) for name in ("BRUKAFFN.DX", "BRUKPAC.DX", "BRUKSQZ.DX")]
    assert [(block.coding, len(block.y)) for block in blocks] == [("AFFN", 16384), ("PAC", 16384), ("SQZ", 16384)]
    for block in blocks:
        assert np.array_equal(block.y, blocks[0].y)


def test_the_same_table_in_difference_form_decodes_as_the_pypi_reader_decodes_it():
    """Its writer rounded anew, so that the figures lie beside those of the other forms; every Y-check holds."""
    import jcamp

    data = as_infrared(outside.collection_file("test/brukdif.jdx"))
    block = block_of_figures("test/brukdif.jdx")
    with contextlib.redirect_stdout(io.StringIO()):
        other = jcamp.read(io.BytesIO(data))
    assert np.array_equal(block.y[::-1], other["y"]) and len(block.y) == 16384
    plain = block_of_figures("BRUKAFFN.DX")
    assert np.abs(block.y - plain.y).max() < 2e-5 * np.abs(plain.y).max()


def test_five_copies_of_a_published_table_decode_to_the_same_figures():
    """Their axis runs below zero, which no wavenumber does, so that only the decoder is asked."""
    tables = []
    for number in range(1, 6):
        text = outside.collection_file(f"o0{number}.jdx").decode("latin-1").replace("\r\n", "\n")
        tables.append(decode_table(re.search(r"##XYDATA[^\n]*\n(.*?\n)##", text, re.DOTALL).group(1)))
    assert {table.coding for table in tables} == {"AFFN", "PAC", "SQZ", "DIF", "DIFDUP"}
    for table in tables:
        assert np.array_equal(table.y, tables[0].y) and len(table.y) == 8192


def test_copies_of_one_measurement_agree():
    transmittance, absorbance = block_of("xyinc1.jdx"), block_of("fixinc2.jdx")
    seen = absorbance.y < 2
    assert np.abs(transmittance.y - 10.0**-absorbance.y)[seen].max() < 1e-4
    interpolated = block_of("dupinc2.jdx")
    spline = CubicSpline(transmittance.x_cm1, transmittance.y)
    assert np.abs(spline(interpolated.x_cm1) - interpolated.y / 100).max() < 1.5e-3
    percent, fraction = block_of("pacdec1.jdx"), block_of("PE1800.DX")
    assert np.allclose(percent.y, 100 * fraction.y, rtol=1e-12)
    percent, absorbance = block_of("BRUKER1.JCM"), block_of("BRUKER2.JCM")
    assert np.abs(percent.y / 100 - 10.0**-absorbance.y)[absorbance.y < 1.5].max() < 1e-3
    right, misprinted = block_of("jtpolys.jdx"), block_of("jtpolysd.jdx")
    assert np.allclose(misprinted.y / right.y, 2.3884185791 / 2.384185791, rtol=2e-5)


def test_ends_and_points_give_the_axis_where_the_printed_abscissae_are_a_step_beside():
    for name in ("acetone", "ethyl acetate", "sulphur hexafluoride"):
        block = block_of(f"infrared_spectra/{name}.jdx")
        assert "reader.x_labels_shifted" in codes(block)
        assert block.x_cm1[0] == float(block.headers["FIRSTX"]) and block.x_cm1[-1] == float(block.headers["LASTX"])


def test_residual_carbon_dioxide_lines_prove_that_axis():
    """Lines of 12C16O2 nu3 (HITRAN, from memory): the median offset must be far below the step of 0.241 cm-1."""
    lines_cm1 = np.array([2359.97, 2361.47, 2363.0, 2364.1, 2365.44, 2366.65])
    offsets = []
    for spectrum in outside.open_collection():
        block = read(spectrum.data).blocks[spectrum.block]
        if "reader.x_labels_shifted" not in codes(block) or block.spacing_cm1 < 0.2:
            continue
        x, y = block.x_cm1, block.y
        for line in lines_cm1:
            near = np.flatnonzero(np.abs(x - line) < 0.45)
            top = near[np.argmax(y[near])]
            left, middle, right = y[top - 1 : top + 2]
            curvature = left - 2 * middle + right
            if curvature < 0 and near[0] < top < near[-1]:
                offsets.append(x[top] + 0.5 * (left - right) / curvature * block.spacing_cm1 - line)
    assert len(offsets) > 60
    assert abs(np.median(offsets)) < 0.06


@pytest.mark.parametrize(
    ("name", "number", "expected"),
    [
        ("jtpolysd.jdx", 0, "reader.yfactor_doubtful"),
        ("SPECFILE.DX", 0, "reader.closing_check_empty"),
        ("SPECFILE.DX", 0, "reader.x_labels_drift"),
        ("compound.jdx", 3, "reader.declared_in_other_scale"),
        ("ethanol2.jdx", 0, "reader.label_repeated"),
        ("isopropanol_ASDF.jdx", 0, "reader.closing_check_missing"),
        ("infrared_spectra/acetone.jdx", 0, "reader.deltax_rounded"),
        ("infrared_spectra/acetone.jdx", 0, "reader.maxx_differs"),
    ],
)
def test_known_contradictions_are_found(name, number, expected):
    assert expected in codes(block_of(name, number))


@pytest.mark.parametrize(
    ("name", "ordinate"),
    [
        (name, Ordinate.PERCENT_TRANSMITTANCE)
        for name in (
            "ethanol2.jdx",
            "dupinc2.jdx",
            "dupdec1.jdx",
            "fixdec1.jdx",
            "fixinc1.jdx",
            "pacdec1.jdx",
            "SPECFILE.DX",
            "BRUKER1.JCM",
        )
    ]
    + [
        (name, Ordinate.TRANSMITTANCE)
        for name in ("jtpolys.jdx", "dupdec2.jdx", "sqzdupd1.jdx", "PE1800.DX", "infrared_spectra/benzene.jdx")
    ]
    + [("infrared_spectra/water.jdx", Ordinate.ABSORBANCE), ("infrared_spectra/acetone.jdx", Ordinate.ABSORPTIVITY)],
)
def test_fraction_and_percent_are_decided_from_the_values_and_said(name, ordinate):
    block = block_of(name)
    assert block.ordinate_used is ordinate
    assert ("reader.values_in_percent" in codes(block)) == (ordinate is Ordinate.PERCENT_TRANSMITTANCE)


def test_transmittance_of_zero_and_below_is_kept_as_it_stands():
    assert block_of("sqzdupd1.jdx").y.min() < 2e-5
    assert block_of("fixdec1.jdx").y.min() < 0


def test_only_difference_forms_claim_to_check_themselves():
    for spectrum in outside.open_collection():
        block = read(spectrum.data).blocks[spectrum.block]
        if block.self_checking:
            assert block.coding in ("DIF", "DIFDUP") and "reader.closing_check_missing" not in codes(block)
    assert block_of("dupdec1.jdx").self_checking and not block_of("BRUKER1.JCM").self_checking


def test_the_pypi_reader_agrees_where_it_can_read():
    """`jcamp` 1.3.2 as the oracle: it raises on four of these files and shortens two; the others must agree."""
    import jcamp

    agreed = 0
    for spectrum in outside.open_collection():
        with contextlib.redirect_stdout(io.StringIO()), contextlib.suppress(Exception):
            other = jcamp.read(io.BytesIO(spectrum.data))
            other = other["children"][spectrum.block] if "children" in other else other
            order = np.argsort(other["x"])
            block = read(spectrum.data).blocks[spectrum.block]
            if len(other["x"]) == len(other["y"]) == len(block.y):
                assert np.allclose(other["y"][order], block.y, rtol=1e-9, atol=0), spectrum.file_name
                assert np.allclose(other["x"][order], block.x_cm1, rtol=1e-9, atol=0), spectrum.file_name
                agreed += 1
    assert agreed >= 80


def test_a_spectrum_is_read_only_and_rises():
    block = block_of("dupdec1.jdx")
    assert (np.diff(block.x_cm1) > 0).all() and block.evenly_spaced
    for array in (block.x_cm1, block.y):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0


def test_a_reader_finding_is_information_or_more():
    severities = {
        finding.severity
        for spectrum in outside.open_collection()
        for finding in read(spectrum.data).blocks[spectrum.block].findings
    }
    assert severities == {Severity.INFO, Severity.WARNING, Severity.SERIOUS}


@pytest.mark.parametrize("name", ["ethanol2.jdx", "jtpolysd.jdx", "ammonia.jdx", "methanol.jdx", "m-xylene.jdx"])
def test_a_spacing_that_lost_its_last_figure_is_no_contradiction(name):
    assert "reader.deltax_differs" not in codes(block_of(name))


def test_a_spacing_that_is_wrong_by_more_than_rounding_is_named():
    (finding,) = [f for f in block_of("sulphur hexafluoride.jdx").findings if f.code == "reader.deltax_differs"]
    assert finding.severity is Severity.WARNING and "0.0625" in finding.message and "0.0602" in finding.message
