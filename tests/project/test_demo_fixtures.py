"""The demonstration's data are complete, consistent, marked as invented, and come out the same each time."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from fixtures.demo import compounds, masters, scenario
from fixtures.demo.files import RECIPES, SAMPLES, build_files
from fixtures.demo.jcamp import jcamp_bytes
from fixtures.demo.records import Material, Story
from fixtures.demo.shapes import (
    Band,
    Setup,
    absorption,
    attenuated,
    carbon_dioxide_lines,
    measure,
    profile,
    water_vapour_lines,
    wavenumber_axis,
)
from spectra.core import group_table
from spectra.core.formats import read
from spectra.core.params import MethodParams
from spectra.core.pipeline import analyse
from spectra.core.results import AnalysisResult, ReferenceInput, WatchInput
from spectra.core.types import Conditions, Phase, SpectrumBlock, Technique

ROOT = Path(__file__).resolve().parents[2]
FILE_ROLES = {"decisive", "replicate", "repeat", "blank", "excluded"}


@pytest.fixture(scope="module")
def files() -> dict[str, bytes]:
    return build_files()


def decode(text: str) -> tuple[np.ndarray, np.ndarray]:
    """Wavenumbers and ordinates of one of our JCAMP-DX files, by the rules of the standard and with all its checks."""
    labels = dict(re.findall(r"^##([^=]+)=(.*?)\r?$", text, flags=re.M))
    body = re.search(r"##XYDATA=\(X\+\+\(Y\.\.Y\)\)\r\n(.*?)##END=", text, flags=re.S).group(1)
    first, last, points = float(labels["FIRSTX"]), float(labels["LASTX"]), int(labels["NPOINTS"])
    x = np.linspace(first, last, points)
    raw: list[int] = []
    ended_in_difference = False
    for line in body.split("\r\n"):
        if not line:
            continue
        assert len(line) <= 80
        label, rest = re.match(r"([0-9.]+)(.*)", line).groups()
        values: list[int] = []
        step = None
        for letter, digits in re.findall(r"([@A-Ia-i%J-Rj-rS-Zs]|\s(?=-?\d))(-?\d*)", rest):
            if letter == " ":
                values.append(int(digits))
            elif letter in "@ABCDEFGHIabcdefghi":
                sign = -1 if letter.islower() else 1
                index = "@ABCDEFGHI".find(letter) if sign > 0 else "@abcdefghi".find(letter)
                values.append(sign * int(f"{index}{digits}"))
            elif letter in "%JKLMNOPQRjklmnopqr":
                sign = -1 if letter.islower() else 1
                index = "%JKLMNOPQR".find(letter) if sign > 0 else "%jklmnopqr".find(letter)
                step = sign * int(f"{index}{digits}")
                values.append(values[-1] + step)
            else:
                count = int(f"{'STUVWXYZs'.find(letter) + 1}{digits}")
                for _ in range(count - 1):
                    values.append(values[-1] + step)
        start = len(raw)
        if ended_in_difference:
            assert values[0] == raw[-1], "the check ordinate repeats the last of the line before"
            start -= 1
            values = values[1:]
        assert abs(float(label) - x[start]) < 0.01, "the wavenumber of a line is that of its first ordinate"
        raw.extend(values)
        ended_in_difference = step is not None
    y = np.array(raw) * float(labels["YFACTOR"])
    assert y.size == points
    assert y[0] == pytest.approx(float(labels["FIRSTY"]), abs=1e-9)
    assert y.max() == pytest.approx(float(labels["MAXY"]), abs=1e-9)
    assert y.min() == pytest.approx(float(labels["MINY"]), abs=1e-9)
    return x, y


def test_the_same_files_come_out_each_time(files):
    assert build_files() == files
    assert set(files) == set(RECIPES)


def test_every_file_says_that_it_is_invented(files):
    for name, content in files.items():
        head = content.decode("ascii")[:600]
        assert "invented for demonstration" in head, name
        assert "(invented)" in head.splitlines()[0], name


def test_no_two_files_share_a_seed():
    seeds = [recipe.seed for recipe in RECIPES.values()]
    assert len(seeds) == len(set(seeds))


def test_every_jcamp_file_decodes_to_what_was_measured(files):
    decoded = 0
    for name, recipe in RECIPES.items():
        if recipe.coding == "text":
            continue
        x, y = decode(files[name].decode("ascii"))
        order = slice(None, None, -1) if recipe.x_falling else slice(None)
        mixture = [(getattr(compounds, part), amount) for part, amount in recipe.mixture]
        true_x, transmittance = measure(mixture, recipe.setup, recipe.seed)
        shown = {
            "transmittance": transmittance,
            "percent": 100 * transmittance,
            "absorbance": -np.log10(np.maximum(transmittance, 1e-6)),
        }[recipe.ordinate]
        np.testing.assert_allclose(x, true_x[order], atol=1e-4, err_msg=name)
        np.testing.assert_allclose(y, shown[order], atol=1e-5, err_msg=name)
        decoded += 1
    assert decoded == len(RECIPES) - 1


def test_the_text_file_uses_a_decimal_comma_and_names_its_columns(files):
    lines = files["CH-5510_1.csv"].decode("ascii").splitlines()
    header = next(i for i, line in enumerate(lines) if line.startswith("Wavenumber"))
    assert lines[header] == "Wavenumber / cm-1;Transmittance / %"
    assert all(re.fullmatch(r"\d+,\d{3};-?\d+,\d{4}", line) for line in lines[header + 1 :])


def test_repeated_differences_are_counted_as_the_standard_says():
    # 10 11 12 13 13 13: after the first ordinate three steps of 1 and two of 0; a count is the total of occurrences.
    content = jcamp_bytes(
        np.arange(400.0, 406.0),
        np.array([10.0, 11, 12, 13, 13, 13]),
        title="t",
        version="4.24",
        coding="DIFDUP",
        y_units="ABSORBANCE",
        y_factor=1.0,
        x_falling=False,
        records=(),
    ).decode()
    assert "\r\n400.0000 A0JU%T\r\n405.0000 A3\r\n" in content
    assert decode(content)[1].tolist() == [10, 11, 12, 13, 13, 13]


def test_a_band_has_its_height_and_width():
    x = np.arange(900.0, 1100.0, 0.01)
    for shape in ("voigt", "lorentz", "gauss"):
        y = profile(x, Band(1000.0, 1.0, 20.0, shape))
        above = x[y >= 0.5]
        assert y.max() == pytest.approx(1.0, abs=1e-6)
        assert above[-1] - above[0] == pytest.approx(20.0, abs=0.05)
    with pytest.raises(ValueError, match="unknown band shape"):
        profile(x, Band(1000.0, 1.0, 20.0, "box"))


def test_an_atr_crystal_sees_less_at_high_wavenumber_and_pulls_strong_bands_down():
    x = wavenumber_axis(650, 4000)
    bands = (Band(3000.0, 1.0, 30.0), Band(1000.0, 1.0, 30.0))
    seen, straight = attenuated(x, bands), absorption(x, bands)
    high, low = x > 2500, x < 1500
    assert seen[high].max() / straight[high].max() < 0.5 < seen[low].max() / straight[low].max()
    assert x[low][np.argmax(seen[low])] < x[low][np.argmax(straight[low])]


def test_gas_lines_lie_where_air_has_them():
    # Often-used lines of water vapour and the two maxima of carbon dioxide at 4 cm-1: common practice.
    fine = np.arange(1300.0, 3950.0, 0.1)
    for lines, expected in (
        (water_vapour_lines(), (1507, 1540, 1559, 1617, 1653, 1684, 1700, 1717, 1772, 3744.5, 3854)),
        (carbon_dioxide_lines(), (2336.5, 2362.0)),
    ):
        u = (fine[:, None] - lines[None, :, 0]) / 2.0
        trace = (np.exp(-np.log(2.0) * u**2) * lines[None, :, 1]).sum(axis=1)
        maxima = fine[1:-1][(trace[1:-1] > trace[:-2]) & (trace[1:-1] > trace[2:])]
        for position in expected:
            assert np.abs(maxima - position).min() < 1.3, position


def test_noise_has_the_stated_size_where_the_instrument_is_best():
    quiet = Setup(carbon_dioxide=0.0, vapour=0.0, offset=0.0, slope=0.0, curvature=0.0, drift=0.0, noise=3e-4)
    x, transmittance = measure((), quiet, seed=5)
    best = (x > 1300) & (x < 1800)
    assert transmittance[best].std() == pytest.approx(3e-4, rel=0.2)


def test_polystyrene_lies_on_its_accustomed_positions():
    # Nominal positions and tolerances as pharmacopoeias give them for a polystyrene film.
    x = np.arange(600.0, 3200.0, 0.02)
    y = absorption(x, compounds.POLYSTYRENE)
    for nominal in (3060.0, 2849.5, 1942.9, 1601.2, 1583.0, 1154.5, 1028.3):
        near = np.abs(x - nominal) < 4
        assert abs(x[near][np.argmax(y[near])] - nominal) < 0.5


def test_every_reference_watch_list_and_material_names_what_exists():
    references = {reference.code: reference for reference in masters.REFERENCES}
    watch_lists = {watch.code: watch for watch in masters.WATCH_LISTS}
    procedures = {procedure.number: procedure for procedure in masters.PROCEDURES}
    assert len(references) == len(masters.REFERENCES)
    assert all(reference.file in RECIPES for reference in references.values())
    for watch in watch_lists.values():
        assert all(code in references for _, code in watch.items)
    for material in masters.MATERIALS:
        reference, procedure = references[material.reference], procedures[material.procedure]
        assert reference.material == material.code
        assert (reference.technique, reference.phase) == (procedure.technique, material.phase)
        techniques = {references[code].technique for _, code in watch_lists[material.watch_list].items}
        assert techniques == {procedure.technique}, material.code
        assert not set(material.expected_groups) & set(material.forbidden_groups)
        assert material.companion_tests and material.not_separable_from and material.cautions
        assert bool(material.smiles) != bool(material.repeat_unit)


def test_every_structure_is_possible_and_has_the_stated_formula():
    from rdkit import Chem
    from rdkit.Chem.rdMolDescriptors import CalcMolFormula

    for material in masters.MATERIALS:
        molecule = Chem.MolFromSmiles(material.smiles or material.repeat_unit)
        assert molecule is not None, material.code
        assert CalcMolFormula(molecule).replace("*2", "") == material.formula, material.code  # * ends a repeat unit


def test_the_caution_about_other_glycols_is_fixed():
    glycol = next(material for material in masters.MATERIALS if material.code == "PGL")
    assert any("cannot clear diethylene glycol" in text for text in glycol.cautions)


def test_every_accessory_has_a_check_that_should_pass():
    for instrument in masters.INSTRUMENTS:
        codes = {accessory.code for accessory in instrument.accessories}
        assert {check.accessory for check in instrument.checks if check.expected == "passed"} == codes
        assert all(check.file in RECIPES for check in instrument.checks)
        assert instrument.open_beam_file in RECIPES


def test_every_story_uses_what_exists_and_ends_where_it_says():
    deliveries = {delivery.lot: delivery for delivery in scenario.DELIVERIES}
    materials = {material.code for material in masters.MATERIALS}
    assert all(delivery.material in materials for delivery in deliveries.values())
    used = [file.name for story in scenario.STORIES for file in story.files]
    assert sorted(used) == sorted(SAMPLES)
    assert len({story.key for story in scenario.STORIES}) == len(scenario.STORIES)
    for story in scenario.STORIES:
        delivery = deliveries[story.lot]
        assert all(1 <= number <= delivery.containers for number in story.containers)
        assert (story.kind == "composite") == (len(story.containers) > 1)
        assert {file.role for file in story.files} <= FILE_ROLES
        assert all((file.role == "excluded") == bool(file.excluded) for file in story.files)
        assert sum(file.role == "decisive" for file in story.files) == (story.end_state != "waiting_upload")
        last = story.versions[-1] if story.versions else None
        assert last is None or not last.submitted or (last.conclusion and last.text)
        decision = last.review.decision if last and last.review else None
        expected = {
            "waiting_upload": last is None and not story.files,
            "uploaded": last is None and bool(story.files),
            "draft": bool(last) and not last.submitted,
            "submitted": bool(last) and last.submitted and last.review is None,
            "in_review": bool(last) and last.review is not None and decision is None,
            "approved": decision == "approve",
            "rejected_revised": len(story.versions) == 2 and story.versions[0].review.decision == "reject",
        }
        assert expected[story.end_state], story.key


def test_all_end_states_are_shown():
    assert {story.end_state for story in scenario.STORIES} == {
        "waiting_upload",
        "uploaded",
        "draft",
        "submitted",
        "in_review",
        "rejected_revised",
        "approved",
    }


def test_people_appear_by_account_only():
    for story in scenario.STORIES:
        assert story.analyst in {"analyst_1", "analyst_2"}
        for version in story.versions:
            assert version.review is None or version.review.by in {"reviewer_1", "reviewer_2"}


def conditions_of(technique: str, phase: str) -> Conditions:
    crystal = {"atr_crystal_index": 2.4, "atr_angle_deg": 45.0, "atr_reflections": 1} if technique == "atr" else {}
    return Conditions(technique=Technique(technique), phase=Phase(phase), resolution_cm1=4.0, **crystal)


@pytest.fixture(scope="module")
def blocks(files) -> dict[str, SpectrumBlock]:
    return {name: read(content).blocks[0] for name, content in files.items()}


@pytest.fixture(scope="module")
def analysed(blocks):
    """A function from a file name and its material to the analysis, each made once."""
    table = group_table.load((ROOT / "fixtures" / "group_table" / "version_1.toml").read_text(encoding="utf-8"))
    references = {reference.code: reference for reference in masters.REFERENCES}
    watch_lists = {watch.code: watch for watch in masters.WATCH_LISTS}
    procedures = {procedure.number: procedure for procedure in masters.PROCEDURES}
    done: dict[str, AnalysisResult] = {}

    def result(name: str, material: Material) -> AnalysisResult:
        if name not in done:
            reference = references[material.reference]
            watched = [(label, references[code]) for label, code in watch_lists[material.watch_list].items]
            done[name] = analyse(
                blocks[name],
                conditions=conditions_of(procedures[material.procedure].technique, material.phase),
                params=MethodParams(),
                table=table,
                reference=ReferenceInput(
                    reference.name, blocks[reference.file], conditions_of(reference.technique, reference.phase)
                ),
                watch=[
                    WatchInput(label, blocks[item.file], conditions_of(item.technique, item.phase))
                    for label, item in watched
                ],
                smiles=material.smiles or material.repeat_unit,
                expected_groups=material.expected_groups,
                forbidden_groups=material.forbidden_groups,
            )
        return done[name]

    return result


def material_of(story: Story) -> Material:
    code = next(delivery.material for delivery in scenario.DELIVERIES if delivery.lot == story.lot)
    return next(material for material in masters.MATERIALS if material.code == code)


def file_of(story: Story, role: str) -> str:
    return next(file.name for file in story.files if file.role == role)


def test_the_program_reads_every_file_without_a_complaint(files):
    for name, content in files.items():
        outcome = read(content)
        assert outcome.problem is None, name
        assert [finding.code for finding in outcome.blocks[0].findings] == [], name


@pytest.mark.parametrize("story", [s for s in scenario.STORIES if s.tells], ids=lambda story: story.key)
def test_the_analysis_tells_the_story(story, analysed):
    result = analysed(file_of(story, "decisive"), material_of(story))
    for tell in story.tells:
        kind, _, what = tell.partition(":")
        if kind == "identity":
            assert result.identity.verdict == what
        elif kind == "found":
            assert what in {item.name for item in result.impurities.screened if item.verdict == "found"}
        elif kind == "finding":
            assert what in {finding.code for finding in result.findings}
        else:
            aside = analysed(file_of(story, "excluded"), material_of(story))
            assert what in {finding.code for finding in aside.findings}


@pytest.mark.parametrize(
    "story", [s for s in scenario.STORIES if "identity:consistent" in s.tells], ids=lambda story: story.key
)
def test_a_good_lot_raises_no_alarm(story, analysed):
    result = analysed(file_of(story, "decisive"), material_of(story))
    assert [item.name for item in result.impurities.screened if item.verdict == "found"] == []
    assert result.impurities.unexplained == ()
    assert [claim.group for claim in result.groups if claim.agrees == "no"] == []
    serious = {finding.code for finding in result.findings if finding.severity != "info"}
    assert serious <= {"measurement.water_vapour", "measurement.carbon_dioxide"}


def story_named(key: str) -> Story:
    return next(story for story in scenario.STORIES if story.key == key)


def test_nothing_is_cleared_in_the_saturated_film(analysed):
    story = story_named("saturated_film")
    result = analysed(file_of(story, "decisive"), material_of(story))
    assert result.identity.verdict == "cannot_be_compared"
    assert {item.verdict for item in result.impurities.screened} == {"cannot_be_seen"}
    assert {item.agrees for item in result.impurities.screened} == {"neutral"}


def test_the_wet_disc_says_nothing_about_hydroxyl_and_is_not_called_consistent(analysed):
    story = story_named("wet_disc")
    result = analysed(file_of(story, "decisive"), material_of(story))
    assert result.identity.verdict == "consistent_with_differences" and result.identity.agrees == "neutral"
    assert any("less than 95 %" in sentence for sentence in result.identity.against)
    claims = {claim.group: claim for claim in result.groups}
    assert claims["amide"].verdict != "supported" and claims["oh_or_nh"].verdict != "supported"
    states = {
        window["state"]
        for lane in result.to_json()["lanes"]
        for window in lane["windows"]
        if window["low_cm1"] >= 3100 and window["high_cm1"] <= 3700
    }
    assert states == {"not_readable"}
    moist = [mask for mask in result.to_json()["masked"] if "moist" in mask["reason"]]
    assert [(mask["low_cm1"], mask["high_cm1"]) for mask in moist] == [(1600.0, 1660.0), (3100.0, 3700.0)]
