"""Units and kinds of ordinates: read where the file states them, asked where it does not, never guessed."""

import numpy as np
import pytest

from spectra.core.formats import read
from spectra.core.formats.ordinates import ordinate_named, x_unit_named
from spectra.core.types import AxisUnit, Ordinate, ReadOptions, SpectrumBlock, Technique

POSITIONS = np.linspace(4000.0, 400.0, 181)
FRACTION = 0.95 - 0.8 * np.exp(-(((POSITIONS - 1700) / 60) ** 2))


def document(x_units="1/CM", y_units="TRANSMITTANCE", y=FRACTION, x=POSITIONS, extra=""):
    rows = "\n".join(f"{a:.8f}, {b:.8f}" for a, b in zip(x, y, strict=True))
    return (
        "##TITLE=t\n##JCAMP-DX=4.24\n##DATA TYPE=INFRARED "
        f"SPECTRUM\n##XUNITS={x_units}\n##YUNITS={y_units}\n##XFACTOR=1\n##YFACTOR=1\n"
        f"##FIRSTX={x[0]:.8f}\n##LASTX={x[-1]:.8f}\n##NPOINTS={len(x)}\n{extra}##XYPOINTS=(XY..XY)\n{rows}\n##END=\n"
    ).encode()


def only(data, **answers):
    (block,) = read(data, ReadOptions(**answers)).blocks
    return block


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("1/CM", AxisUnit.CM1),
        ("cm-1", AxisUnit.CM1),
        ("cm^-1", AxisUnit.CM1),
        ("Wavenumber (cm\N{SUPERSCRIPT MINUS}\N{SUPERSCRIPT ONE})", AxisUnit.CM1),
        ("cm\N{MINUS SIGN}1", AxisUnit.CM1),
        ("MICROMETERS", AxisUnit.MICROMETRE),
        ("wavelength / \N{MICRO SIGN}m", AxisUnit.MICROMETRE),
        ("\N{GREEK SMALL LETTER MU}m", AxisUnit.MICROMETRE),
        ("um", AxisUnit.MICROMETRE),
        ("microns", AxisUnit.MICROMETRE),
        ("NANOMETERS", AxisUnit.NANOMETRE),
        ("nm", AxisUnit.NANOMETRE),
        ("wavenumber", None),
        ("", None),
        ("HZ", None),
        ("nm or cm-1", None),
    ],
)
def test_units_of_the_abscissa_are_recognised(text, unit):
    assert x_unit_named(text) is unit


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("TRANSMITTANCE", Ordinate.TRANSMITTANCE),
        ("%T", Ordinate.PERCENT_TRANSMITTANCE),
        ("T (%)", Ordinate.PERCENT_TRANSMITTANCE),
        ("% Transmission", Ordinate.PERCENT_TRANSMITTANCE),
        ("PERCENT TRANSMITTANCE", Ordinate.PERCENT_TRANSMITTANCE),
        ("T", Ordinate.TRANSMITTANCE),
        ("ABSORBANCE", Ordinate.ABSORBANCE),
        ("Abs.", Ordinate.ABSORBANCE),
        ("A", Ordinate.ABSORBANCE),
        ("LOG(1/R)", Ordinate.ABSORBANCE),
        ("REFLECTANCE", Ordinate.REFLECTANCE),
        ("% Reflectance", Ordinate.REFLECTANCE),
        ("KUBELKA-MUNK", Ordinate.ABSORPTIVITY),
        ("(micromol/mol)-1m-1 (base 10)", Ordinate.ABSORPTIVITY),
        ("ARBITRARY UNITS", None),
        ("counts", None),
        ("", None),
        ("sample A", None),
    ],
)
def test_kinds_of_ordinates_are_recognised(text, kind):
    assert ordinate_named(text) is kind


@pytest.mark.parametrize(
    ("declared", "unit", "factor"), [("MICROMETERS", AxisUnit.MICROMETRE, 1e4), ("NANOMETERS", AxisUnit.NANOMETRE, 1e7)]
)
def test_wavelengths_become_wavenumbers(declared, unit, factor):
    block = only(document(x_units=declared, x=factor / POSITIONS))
    assert np.allclose(block.x_cm1, POSITIONS[::-1], rtol=1e-6) and not block.evenly_spaced
    assert np.allclose(block.y, FRACTION[::-1], atol=1e-8)
    assert only(document(x_units="", x=factor / POSITIONS)).problem.question == "x_unit"
    assert isinstance(only(document(x_units="", x=factor / POSITIONS), x_unit=unit), SpectrumBlock)


def test_an_axis_far_outside_the_infrared_is_asked_about():
    assert only(document(x_units="1/CM", x=1e4 / POSITIONS)).problem.question == "x_unit"
    block = only(document(x_units="1/CM", x=1e4 / POSITIONS), x_unit=AxisUnit.MICROMETRE)
    assert "reader.x_unit_overridden" in {finding.code for finding in block.findings}


@pytest.mark.parametrize(
    ("declared", "scale", "kind", "said"),
    [
        ("TRANSMITTANCE", 1, Ordinate.TRANSMITTANCE, None),
        ("TRANSMITTANCE", 100, Ordinate.PERCENT_TRANSMITTANCE, "reader.values_in_percent"),
        ("%T", 100, Ordinate.PERCENT_TRANSMITTANCE, None),
    ],
)
def test_fraction_and_percent_are_told_apart(declared, scale, kind, said):
    block = only(document(y_units=declared, y=scale * FRACTION))
    assert block.ordinate_used is kind and np.allclose(block.y, scale * FRACTION[::-1], atol=1e-7)
    assert {finding.code for finding in block.findings} == ({said} if said else set())


@pytest.mark.parametrize(("declared", "scale"), [("%T", 1), ("TRANSMITTANCE", 3.5), ("TRANSMITTANCE", 1000)])
def test_values_that_fit_neither_scale_are_asked_about(declared, scale):
    problem = only(document(y_units=declared, y=scale * FRACTION)).problem
    assert (problem.code, problem.question) == ("reader.ordinate_ambiguous", "ordinate")


def test_an_answer_that_the_values_contradict_is_marked():
    block = only(document(y=100 * FRACTION), ordinate=Ordinate.TRANSMITTANCE)
    assert {finding.code for finding in block.findings} == {"reader.ordinate_unlikely"}


def test_absorbance_beyond_any_spectrometer_is_asked_about():
    assert only(document(y_units="ABSORBANCE", y=100 * FRACTION)).problem.code == "reader.ordinate_implausible"


@pytest.mark.parametrize(
    ("technique", "kind", "code"),
    [
        (Technique.ATR, Ordinate.TRANSMITTANCE, "reader.reflectance_as_transmittance"),
        (Technique.DIFFUSE, Ordinate.REFLECTANCE, "reader.diffuse_reflectance"),
    ],
)
def test_reflectance_is_told_apart_by_technique(technique, kind, code):
    for scale in (1, 100):
        block = only(document(y_units="REFLECTANCE", y=scale * FRACTION), technique=technique)
        assert block.ordinate_used is kind and code in {finding.code for finding in block.findings}
        assert np.allclose(block.y, FRACTION[::-1], atol=1e-7)


@pytest.mark.parametrize("technique", [None, Technique.TRANSMISSION, Technique.GAS_CELL])
def test_reflectance_without_its_technique_is_asked_about(technique):
    problem = only(document(y_units="REFLECTANCE"), technique=technique).problem
    assert (problem.code, problem.question) == ("reader.reflectance_unclear", "ordinate")


def test_a_technique_that_the_file_names_is_used():
    block = only(document(y_units="REFLECTANCE", extra="##SAMPLING PROCEDURE=ATR, one reflection\n"))
    assert block.ordinate_used is Ordinate.TRANSMITTANCE


def test_transmittance_of_zero_and_below_is_kept():
    y = FRACTION.copy()
    y[50:53] = [0.0, -0.002, 0.0]
    assert only(document(y=y)).y.min() == -0.002


@pytest.mark.parametrize("ending", ["\r\n", "\r", "\n"])
def test_every_line_ending_reads_alike(ending):
    data = document().replace(b"\n", ending.encode())
    assert np.allclose(only(data).y, FRACTION[::-1], atol=1e-8)
    broken = document(y=FRACTION).replace(b"##XYPOINTS", b"##NPOINTS=7\n##XYPOINTS").replace(b"\n", ending.encode())
    assert only(broken).problem.line == 11


@pytest.mark.parametrize(
    "wrap",
    [
        lambda data: b"\xef\xbb\xbf" + data,
        lambda data: data + b"\x1a",
        lambda data: data + b"\r\n\x1a\x00\x00",
        lambda data: b"\n\n" + data,
    ],
)
def test_marks_before_and_after_the_text_do_no_harm(wrap):
    assert len(only(wrap(document())).y) == len(POSITIONS)


def test_comments_may_stand_anywhere():
    data = (
        document()
        .replace(b"##YFACTOR=1", b"##YFACTOR=1 $$ ##YFACTOR=2")
        .replace(b"##END=", b"$$ ##END=\n##END= $$ done")
    )
    data = data.replace(b"4000.00000000, ", b"$$ first point\n4000.00000000, ", 1).replace(
        b"\n3980", b" $$ a remark\n3980", 1
    )
    assert np.allclose(only(data).y, FRACTION[::-1], atol=1e-8)


def test_latin_1_and_utf_8_headers_read_alike():
    text = document().decode().replace("##TITLE=t", "##TITLE=gr\N{LATIN SMALL LETTER U WITH DIAERESIS}n")
    assert (
        only(text.encode("utf-8")).title
        == only(text.encode("latin-1")).title
        == "gr\N{LATIN SMALL LETTER U WITH DIAERESIS}n"
    )


def test_blocks_in_blocks_are_read_each_by_itself():
    inner = document().replace(b"TITLE=t", b"TITLE=inner")
    raman = document().replace(b"INFRARED", b"RAMAN")
    data = (
        b"##TITLE=all\n##DATA TYPE=LINK\n##BLOCKS=3\n"
        + inner
        + b"##TITLE=group\n##DATA TYPE=LINK\n"
        + raman
        + inner
        + b"##END=\n##END=\n"
    )
    blocks = read(data).blocks
    assert [block.title for block in blocks] == ["inner", "t", "inner"] and [block.index for block in blocks] == [
        0,
        1,
        2,
    ]
    assert blocks[1].problem.code == "reader.other_technique"
    assert np.array_equal(blocks[0].y, blocks[2].y)


def test_a_block_that_was_never_closed_is_said_and_the_next_is_read():
    blocks = read(document().replace(b"##END=\n", b"") + document()).blocks
    assert "reader.end_missing" in {finding.code for finding in blocks[0].findings} and len(blocks[1].y) == len(
        POSITIONS
    )


def test_exchanged_ends_of_pairs_are_said():
    block = only(
        document()
        .replace(b"##FIRSTX=4000", b"##FIRSTX=X")
        .replace(b"##LASTX=400.", b"##LASTX=4000.")
        .replace(b"FIRSTX=X", b"FIRSTX=400")
    )
    assert "reader.ends_exchanged" in {finding.code for finding in block.findings}


@pytest.mark.parametrize(
    ("declared", "severity"), [("##MAXY=95\n", "info"), ("##MAXY=0.95\n", "warning"), ("", "warning")]
)
def test_percent_that_the_header_confirms_is_only_mentioned(declared, severity):
    block = only(document(y_units="TRANSMITTANCE", y=100 * FRACTION, extra=declared))
    (finding,) = [finding for finding in block.findings if finding.code == "reader.values_in_percent"]
    assert finding.severity == severity
