"""The number forms and labels of JCAMP-DX against the worked values in fixtures/check_values/jcamp.json."""

import json
from pathlib import Path

import numpy as np
import pytest

from spectra.core.errors import CoreError
from spectra.core.formats import read
from spectra.core.formats.asdf import decode_pairs, decode_table
from spectra.core.formats.jcamp_labels import normalise_label, read_number
from spectra.core.types import Severity

CHECKS = {
    check["id"]: check
    for check in json.loads((Path(__file__).parents[2] / "fixtures/check_values/jcamp.json").read_text())["checks"]
}
LABELS = "##TITLE=t\n##JCAMP-DX=4.24\n##DATA TYPE=INFRARED SPECTRUM\n##XUNITS=1/CM\n##YUNITS=KUBELKA-MUNK\n"


def document(lines, **labels):
    head = "".join(f"##{label}={value}\n" for label, value in labels.items())
    return (LABELS + head + "##XYDATA=(X++(Y..Y))\n" + "\n".join(lines) + "\n##END=\n").encode()


@pytest.mark.parametrize("name", ["JC-ASDF-2", "JC-ASDF-3", "JC-ASDF-4"])
def test_worked_lines_decode(name):
    assert decode_table(CHECKS[name]["line"]).y.tolist() == CHECKS[name]["expected"]


def test_an_ordinate_in_plain_figures_may_begin_a_line_of_differences():
    check = CHECKS["JC-ASDF-1"]
    assert decode_table("0 " + check["line"]).y.tolist() == check["expected"]


def test_the_repeated_ordinate_is_compared_and_dropped():
    check = CHECKS["JC-YCHK"]
    block = read(document(check["lines"], **check["header"])).blocks[0]
    assert block.y[::-1].tolist() == check["expected"]
    assert block.x_cm1[[-1, 0]].tolist() == [check["x_first"], check["x_last"]]
    assert block.self_checking


def test_a_repeated_ordinate_that_differs_is_refused_with_its_line():
    check = CHECKS["JC-YCHK"]
    lines = [line.replace("A079", "A078") for line in check["lines"]]
    problem = read(document(lines, **check["header"])).blocks[0].problem
    assert (problem.code, problem.line) == ("reader.y_check_failed", 14)


def test_the_abscissa_of_a_line_is_that_of_its_repeated_ordinate():
    check = CHECKS["JC-XCHK"]
    table = decode_table("\n".join(check["lines"]))
    assert table.first_index[1] - table.first_index[0] == check["expected"]
    assert (table.label[1] - table.label[0]) / check["deltax"] == check["expected"]


def test_the_spacing_follows_from_ends_and_points():
    check = CHECKS["JC-DELTAX"]
    lines = [f"{4000 - 20 * row} " + " ".join("5" for _ in range(10)) for row in range(180)] + ["400 5"]
    labels = {
        "XFACTOR": 1,
        "YFACTOR": 1,
        "FIRSTX": check["firstx"],
        "LASTX": check["lastx"],
        "NPOINTS": check["npoints"],
        "DELTAX": "-2.5",
    }
    block = read(document(lines, **labels)).blocks[0]
    (finding,) = [finding for finding in block.findings if finding.code == "reader.deltax_differs"]
    assert finding.facts["label"] == "DELTAX" and finding.facts["declared"] == "-2.5"
    assert abs(finding.facts["decoded"] - check["expected"]) <= check["tolerance"]


@pytest.mark.parametrize("label", CHECKS["JC-LABEL"]["labels"])
def test_labels_are_compared_without_case_and_marks(label):
    assert normalise_label(label) == CHECKS["JC-LABEL"]["expected"]


@pytest.mark.parametrize(
    ("declared", "severity"), [("7493", Severity.INFO), ("91.467285", None), ("90", Severity.WARNING)]
)
def test_the_first_ordinate_is_accepted_raw_or_scaled(declared, severity):
    check = CHECKS["JC-FIRSTY"]
    lines = [f"{400 + 10 * row} " + " ".join(["7493"] * 10) for row in range(3)]
    labels = {"XFACTOR": 1, "YFACTOR": check["yfactor"], "FIRSTX": 400, "LASTX": 429, "NPOINTS": 30, "FIRSTY": declared}
    found = [
        finding.severity for finding in read(document(lines, **labels)).blocks[0].findings if "firsty" in finding.code
    ]
    assert found == ([severity] if severity else [])


@pytest.mark.parametrize(
    ("line", "label", "ordinates", "coding"),
    [
        ("4400E839", 4400, [5839], "SQZ"),
        ("4400E839E840", 4400, [5839, 5840], "SQZ"),
        ("400 1.5E+03 -2e-1", 400, [1500, -0.2], "AFFN"),
        ("400 1.2E3 1.5E3", 400, [1200, 1500], "AFFN"),
        ("4.0E+02 7 8", 400, [7, 8], "AFFN"),
        ("578.13 128264-105172 167636", 578.13, [128264, -105172, 167636], "PAC"),
        ("4000 +10160+10159", 4000, [10160, 10159], "PAC"),
        ("400 .5 -.25 7.", 400, [0.5, -0.25, 7], "AFFN"),
        ("10@a1", 10, [0, -11], "SQZ"),
        ("400B1399TB1410", 400, [21399, 21399, 21410], "SQZ"),
        ("400 123456789012345678 1", 400, [123456789012345678.0, 1], "AFFN"),
    ],
)
def test_a_line_of_each_form_decodes(line, label, ordinates, coding):
    table = decode_table(line)
    assert (table.label[0], table.y.tolist(), table.coding) == (label, ordinates, coding)


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("400 1.2.3", "reader.bad_character"),
        ("400 + 3", "reader.bad_character"),
        ("400 5-", "reader.bad_character"),
        ("400 . 3", "reader.bad_character"),
        ("400 1e-5e-3", "reader.bad_character"),
        ("400 1e-5.3", "reader.bad_character"),
        ("400 5#", "reader.bad_character"),
        ("400 \N{SUPERSCRIPT TWO} 5", "reader.missing_ordinate"),
        ("400 5 ? 6", "reader.missing_ordinate"),
        ("400 1,5", "reader.decimal_comma"),
        ("400", "reader.line_without_ordinate"),
        ("A500", "reader.line_without_abscissa"),
        ("400T", "reader.repeat_without_value"),
        ("400 5TT", "reader.repeat_without_value"),
        ("400 5T1.5", "reader.repeat_not_whole"),
        ("400J5", "reader.difference_without_start"),
        ("400A5J0.5", "reader.difference_not_whole"),
        ("400A5J99999999999999999999", "reader.number_too_large"),
        ("400 5Z9999999999", "reader.too_many_points"),
        ("400 1" + "0" * 400, "reader.bad_number"),
        ("", "reader.no_data"),
    ],
)
def test_a_broken_line_is_refused_with_its_code(text, code):
    with pytest.raises(CoreError) as refusal:
        decode_table("390 5\n" * bool(text) + text, first_line=7)
    assert (refusal.value.problem.code, refusal.value.problem.line) == (code, 8 if text else 7)


def test_pairs_may_be_parted_by_commas_semicolons_and_blanks():
    table = decode_pairs("  400.5,  7;   401 , -8\n402 9\n", first_line=20)
    assert (table.x.tolist(), table.y.tolist(), table.line.tolist()) == ([400.5, 401, 402], [7, -8, 9], [20, 20, 21])


def test_a_table_longer_than_one_work_piece_decodes_as_its_pieces():
    rng = np.random.default_rng(5)
    values = rng.integers(-99999, 99999, (9000, 5))
    text = "\n".join(f"{index} " + " ".join(map(str, row)) for index, row in enumerate(values.tolist()))
    table = decode_table(text)
    assert np.array_equal(table.y, values.ravel()) and np.array_equal(table.line, np.arange(1, 9001))


@pytest.mark.parametrize(
    ("text", "unit"), [("4000", 1.0), ("574.93", 0.01), ("4.00228378e+03", 1e-5), (".5", 0.1), ("9.8E-0001", 0.01)]
)
def test_the_last_figure_of_a_declared_number_sets_its_tolerance(text, unit):
    assert read_number(text, 1).unit == pytest.approx(unit, rel=1e-12)


@pytest.mark.parametrize("text", ["4000,5", "1_000", "nan", "inf", "1e999", "0. 449", "", "one"])
def test_what_is_no_number_is_not_read_as_one(text):
    assert read_number(text, 1) is None
