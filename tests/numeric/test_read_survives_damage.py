"""Random damage: no unhandled exception, no long wait; lost, swapped, cut lines and changed differences are found."""

import random
import time

import pytest

from spectra.core.formats import read
from spectra.core.formats.limits import MAX_FILE_BYTES, MAX_LINE_CHARACTERS, MAX_LINES
from spectra.core.types import ReadResult, RefusedBlock, SpectrumBlock
from tests import outside
from tests.bench.fuzz_reading import ANSWERS, DAMAGED, mutated, seeds

IN_DIFFERENCE_FORM = ("dupdec1.jdx", "dupdec2.jdx", "jtpolysd.jdx", "dupinc2.jdx", "ethanol2.jdx", "compound.jdx")
IN_OTHER_FORMS = (
    "sqzdupd1.jdx",
    "pacdec1.jdx",
    "fixinc1.jdx",
    "jtpolys.jdx",
    "xyinc1.jdx",
    "infrared_spectra/water.jdx",
    "example_compound_file.jdx",
)
MADE_UP = tuple(DAMAGED / name for name in ("nothing_wrong.jdx", "nothing_wrong_in_difference_form.jdx"))
HEAD = b"##TITLE=t\n##DATA TYPE=INFRARED SPECTRUM\n##XUNITS=1/CM\n##YUNITS=ABSORBANCE\n##XFACTOR=1\n##YFACTOR=1\n"


def check_answered(cases):
    for number, data in enumerate(cases):
        start = time.perf_counter()
        result = read(data, ANSWERS[number % len(ANSWERS)])
        assert time.perf_counter() - start < 2, f"case {number} took too long"
        assert isinstance(result, ReadResult) and (result.problem or result.blocks), f"case {number}"


def test_600_damaged_small_files_are_answered():
    check_answered(mutated(seeds(), 600, seed=11))


def test_600_damaged_real_files_are_answered():
    check_answered(mutated(seeds(outside.collection_files()), 600, seed=12))


def lines_and_table(data):
    """The lines of a file and the range of its last data table."""
    lines = data.splitlines(keepends=True)
    begin = (
        max(
            place
            for place, line in enumerate(lines)
            if line.upper().replace(b" ", b"").startswith((b"##XYDATA", b"##XYPOINTS"))
        )
        + 1
    )
    end = next(place for place in range(begin, len(lines)) if lines[place].startswith(b"##"))
    return lines, begin, end


def without_a_line(rng, lines, begin, end):
    place = rng.randrange(begin, end)
    return lines[:place] + lines[place + 1 :]


def with_two_lines_swapped(rng, lines, begin, end):
    place = rng.randrange(begin, end - 1)
    return [*lines[:place], lines[place + 1], lines[place], *lines[place + 2 :]]


def with_a_line_doubled(rng, lines, begin, end):
    place = rng.randrange(begin, end)
    return [*lines[: place + 1], *lines[place:]]


def cut_off(rng, lines, begin, end):
    data = b"".join(lines)
    return [data[: rng.randrange(len(b"".join(lines[:begin])), len(b"".join(lines[:end])) - 1)]]


def with_a_figure_changed(rng, lines, begin, end):
    place = rng.randrange(begin, end)
    line = bytearray(lines[place])
    where = rng.choice([index for index, code in enumerate(line) if code in b"0123456789"])
    line[where] = rng.choice([code for code in b"0123456789" if code != line[where]])
    return [*lines[:place], bytes(line), *lines[place + 1 :]]


def with_a_character_lost(rng, lines, begin, end):
    place = rng.randrange(begin, end)
    line = lines[place].rstrip(b"\r\n")
    where = rng.randrange(len(line))
    return [*lines[:place], line[:where] + line[where + 1 :] + b"\n", *lines[place + 1 :]]


def undetected(data, damage, rng, rounds=40):
    """How many damaged copies were read with other arrays than the sound file; the same arrays are no damage."""
    lines, begin, end = lines_and_table(data)
    sound = read(data).blocks[-1]
    missed = 0
    for _ in range(rounds):
        result = read(b"".join(damage(rng, lines, begin, end)))
        block = result.blocks[-1] if result.blocks else None
        if isinstance(block, SpectrumBlock):
            missed += not (block.y.tobytes() == sound.y.tobytes() and block.x_cm1.tobytes() == sound.x_cm1.tobytes())
    return missed


@pytest.mark.parametrize("damage", [without_a_line, with_two_lines_swapped, with_a_line_doubled, cut_off])
@pytest.mark.parametrize("name", IN_DIFFERENCE_FORM + IN_OTHER_FORMS)
def test_every_lost_swapped_doubled_or_cut_line_is_refused(name, damage):
    assert undetected(outside.collection_file(name), damage, random.Random(name)) == 0


@pytest.mark.parametrize("damage", [with_a_figure_changed, with_a_character_lost])
@pytest.mark.parametrize("name", IN_DIFFERENCE_FORM)
def test_every_edit_in_difference_form_is_refused(name, damage):
    assert undetected(outside.collection_file(name), damage, random.Random(name)) == 0


@pytest.mark.parametrize("damage", [without_a_line, with_two_lines_swapped, with_a_line_doubled, cut_off])
@pytest.mark.parametrize("path", MADE_UP, ids=lambda path: path.name)
def test_a_short_table_protects_its_lines_too(path, damage):
    assert undetected(path.read_bytes(), damage, random.Random(3)) == 0


@pytest.mark.parametrize(
    ("data", "code"),
    [
        (b"1 2\n" * (MAX_FILE_BYTES // 4 + 1), "reader.too_large"),
        (b"\n" * (MAX_LINES + 5) + b"1", "reader.too_many_lines"),
        (b"1 2\n" + b"1" * (MAX_LINE_CHARACTERS + 1), "reader.line_too_long"),
        (HEAD + b"##XYDATA=(X++(Y..Y))\n400 5S99999999\n", "reader.too_many_points"),
        (HEAD + b"##XYDATA=(X++(Y..Y))\n" + (b"A" * 60_000 + b"\n") * 60, "reader.too_many_points"),
        (b"##TITLE=a\n" * 100, "reader.nested_too_deep"),
        (b"##TITLE=a\n##DATA TYPE=LINK\n" + b"##TITLE=b\n##END=\n" * 300, "reader.too_many_blocks"),
        (b"##TITLE=a\n" + b"##A=1\n" * 20_001, "reader.too_many_labels"),
        (b"cm-1" + b",A" * 80 + b"\n" + (b"1" + b",2" * 80 + b"\n") * 5, "reader.too_many_columns"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_what_asks_for_too_much_is_refused_at_once(data, code):
    start = time.perf_counter()
    result = read(data)
    assert time.perf_counter() - start < 2
    problem = result.problem or next(block.problem for block in result.blocks if isinstance(block, RefusedBlock))
    assert problem.code == code
