"""The group table: complete, judged row by row, its mistakes named."""

from pathlib import Path

import pytest

from spectra.core import structure
from spectra.core.errors import CoreError
from spectra.core.group_table import CLASS_IDS, GROUP_IDS, load

TEXT = (Path(__file__).resolve().parents[2] / "fixtures" / "group_table" / "version_1.toml").read_text(encoding="utf-8")


def test_the_shipped_table_holds_every_group_and_class():
    table = load(TEXT)
    assert {group.id for group in table.groups} == set(GROUP_IDS)
    assert {wider.id for wider in table.classes} == set(CLASS_IDS)
    assert table.version == "1" and len(table.digest) == 64


def test_every_row_names_a_source_and_a_status():
    for group in load(TEXT).groups:
        for band in group.bands:
            assert band.source and band.status in ("confirmed", "memory"), group.id


def test_dangerous_groups_carry_a_notice_that_defers_to_the_site():
    table = load(TEXT)
    for name in (
        "isocyanate",
        "azide",
        "cyanide_ion",
        "acid_chloride",
        "sulfonyl_chloride",
        "nitrate_ester",
        "peroxide",
        "nitro",
        "anhydride",
    ):
        assert "safety data sheet" in table.group(name).hazard


def test_every_pattern_can_be_read():
    table = load(TEXT)
    assert structure.expected_groups("CCO", table) == ("alkane_ch", "alcohol_oh")


def test_line_ends_do_not_change_the_digest():
    assert load(TEXT).digest == load(TEXT.replace("\n", "\r\n")).digest


@pytest.mark.parametrize(
    "old, new, words",
    [
        ('id = "ester"', 'id = "esther"', "esther"),
        ("condensed = [1712, 1764]", "condensed = [1764, 1712]", "ester.*band 1.*wrong way round"),
        ("condensed = [1712, 1764]", "condensed = [1712]", "two numbers"),
        ("condensed = [1712, 1764]", "condensed = [1712, 99999]", "outside"),
        ('id = "ketone"', 'id = "ester"', "twice"),
        ('implies = ["ester"]', 'implies = ["nothing"]', "lactone.*nothing"),
        ('version = "1"', "", "version"),
        ('role = "diagnostic", condensed = [1712', 'role = "boss", condensed = [1712', "boss"),
        ("prior = 0.10\nsmarts", "prior = 10\nsmarts", "between 0 and 1"),
        ('version = "1"', 'version = "1', "TOML"),
        ('version = "1"', 'version = "1"\ncolour = "red"', "colour"),
    ],
)
def test_a_mistake_is_refused_and_named(old, new, words):
    assert old in TEXT
    with pytest.raises(CoreError, match=words):
        load(TEXT.replace(old, new, 1))


def test_an_endless_text_is_refused():
    with pytest.raises(CoreError, match="characters"):
        load("#" * 500_000)
