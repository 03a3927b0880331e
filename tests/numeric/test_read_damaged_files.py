"""Every file in fixtures/damaged is refused, or read with findings, exactly as its expected.json says."""

import json
from pathlib import Path

import pytest

from spectra.core.formats import read
from spectra.core.types import RefusedBlock

FOLDER = Path(__file__).parents[2] / "fixtures" / "damaged"
EXPECTED = json.loads((FOLDER / "expected.json").read_text(encoding="utf-8"))


@pytest.mark.parametrize("name", sorted(EXPECTED))
def test_the_damage_is_named_with_its_place(name):
    result = read((FOLDER / name).read_bytes())
    problem = result.problem or next(
        (block.problem for block in result.blocks if isinstance(block, RefusedBlock)), None
    )
    expected = EXPECTED[name]
    if "code" in expected:
        assert problem is not None, "the file was read"
        assert (problem.code, problem.line, problem.question) == (
            expected["code"],
            expected["line"],
            expected.get("question"),
        )
        assert problem.message.endswith(".")
        return
    assert problem is None
    assert (
        sorted([finding.code, finding.line] for block in result.blocks for finding in block.findings)
        == expected["findings"]
    )


def test_every_damaged_file_has_its_expectation():
    files = {path.name for path in FOLDER.iterdir()} - {"README.md", "expected.json"}
    assert files == set(EXPECTED)


def test_headers_carry_no_control_characters():
    (block,) = read((FOLDER / "title_with_markup_and_nul.jdx").read_bytes()).blocks
    assert block.title == "<script>alert(1)</script> film"
    assert not any(
        ord(character) < 32 and character not in "\t\n" for text in block.headers.values() for character in text
    )
