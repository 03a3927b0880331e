"""The whole analysis: its shape, its words, its digest."""

import hashlib
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import rfc8785

from spectra.core import pipeline
from spectra.core.errors import CoreError
from spectra.core.group_table import load
from spectra.core.params import MethodParams
from spectra.core.pipeline import analyse
from spectra.core.results import GROUP_VERDICTS, ReferenceInput, WatchInput
from spectra.core.types import Conditions, Phase, Technique
from tests.numeric.synthetic import ALCOHOL, ALKANE, ESTER, axis, block, spectrum

TABLE = load((Path(__file__).resolve().parents[2] / "fixtures" / "group_table" / "version_1.toml").read_text("utf-8"))
LIQUID = Conditions(phase=Phase.LIQUID, technique=Technique.TRANSMISSION)
PARAMS = MethodParams()


def whole(**options):
    return analyse(
        block(*spectrum(ESTER, seed=2)),
        conditions=LIQUID,
        params=PARAMS,
        table=TABLE,
        reference=ReferenceInput("reference", block(*spectrum(ESTER)), LIQUID, "r1"),
        watch=[WatchInput("hydrocarbon", block(*spectrum(ALKANE)), LIQUID, "w1")],
        smiles="CCOC(C)=O",
        **options,
    )


RESULT = whole()


def test_every_section_is_there():
    body = RESULT.to_json()
    assert {
        "schema",
        "findings",
        "axis",
        "ordinate",
        "noise_absorbance",
        "bands",
        "groups",
        "lanes",
        "identity",
        "impurities",
        "structure",
        "masked",
        "versions",
    } <= set(body)
    assert body["identity"]["verdict"] == "consistent"
    assert body["impurities"]["screened"][0]["verdict"] == "not_found_above_limit"
    assert body["structure"]["formula"] == "C4H8O2" and body["structure"]["degrees_of_unsaturation"] == 1
    assert body["structure"]["expected_groups"] == ["alkane_ch", "ester"]
    assert body["structure"]["contradictions"] == []


def test_only_json_types_and_finite_numbers():
    json.loads(json.dumps(RESULT.to_json(), allow_nan=False))


def test_the_digest_is_that_of_the_canonical_bytes():
    assert RESULT.digest == hashlib.sha256(rfc8785.dumps(RESULT.to_json())).hexdigest()


def test_the_same_input_gives_the_same_result():
    assert whole().digest == RESULT.digest


def test_another_parameter_gives_another_digest():
    other = analyse(
        block(*spectrum(ESTER, seed=2)), conditions=LIQUID, params=MethodParams(weak_level=0.031), table=TABLE
    )
    plain = analyse(block(*spectrum(ESTER, seed=2)), conditions=LIQUID, params=PARAMS, table=TABLE)
    assert other.digest != plain.digest


def test_bands_claims_and_lanes_refer_to_each_other():
    body = RESULT.to_json()
    groups = {claim["group"] for claim in body["groups"]}
    for band in body["bands"]:
        assert set(band["used_by"]) <= groups and band["position_uncertainty_cm1"] > 0
    carbonyl = next(b for b in body["bands"] if abs(b["position_cm1"] - 1740) < 3)
    assert "ester" in carbonyl["used_by"]
    assert {claim["verdict"] for claim in body["groups"]} <= set(GROUP_VERDICTS)
    positions = {band["position_cm1"] for band in body["bands"]}
    for lane in body["lanes"]:
        for window in lane["windows"]:
            assert set(window["band_positions_cm1"]) <= positions


def test_curves_share_one_grid():
    lengths = {len(curve) for curve in RESULT.curves.values()}
    assert len(lengths) == 1
    assert {"x_cm1", "absorbance", "baseline", "corrected", "reference", "residual"} == set(RESULT.curves)
    assert np.all(np.diff(RESULT.curves["x_cm1"]) > 0)


def test_a_section_without_its_input_is_absent():
    body = analyse(block(*spectrum(ESTER)), conditions=LIQUID, params=PARAMS, table=TABLE).to_json()
    assert not {"identity", "impurities", "structure"} & set(body)


def test_another_structure_is_contradicted():
    body = analyse(block(*spectrum(ESTER)), conditions=LIQUID, params=PARAMS, table=TABLE, smiles="CCCCO").to_json()
    kinds = {(c["group"], c["kind"]) for c in body["structure"]["contradictions"]}
    assert ("ester", "supported_but_not_expected") in kinds
    assert ("alcohol_oh", "expected_but_contradicted") in kinds


def test_progress_only_rises_and_ends_at_one():
    steps = []
    whole(progress=lambda name, share: steps.append((name, share)))
    shares = [share for _, share in steps]
    assert shares == sorted(shares) and shares[-1] == 1.0 and len({name for name, _ in steps}) == len(steps)


def test_an_unusable_reference_is_named_and_stops_nothing():
    bad = ReferenceInput("short", block(np.linspace(400, 4000, 10), np.zeros(10)), LIQUID)
    body = analyse(block(*spectrum(ESTER)), conditions=LIQUID, params=PARAMS, table=TABLE, reference=bad).to_json()
    assert "identity" not in body
    assert any(f["code"] == "identity.reference_unusable" for f in body["findings"])


def test_an_unknown_group_is_refused():
    with pytest.raises(CoreError, match="no group"):
        analyse(block(*spectrum(ESTER)), conditions=LIQUID, params=PARAMS, table=TABLE, expected_groups=("magic",))


def test_a_wet_disc_is_named():
    wet = [(3430, 0.4, 300), (1635, 0.15, 60), *ESTER]
    disc = Conditions(phase=Phase.SOLID, technique=Technique.DISC)
    body = analyse(block(*spectrum(wet)), conditions=disc, params=PARAMS, table=TABLE).to_json()
    assert any(f["code"] == "measurement.wet_matrix" for f in body["findings"])


@pytest.mark.parametrize("seed", range(4))
def test_any_shape_ends_in_a_result_or_a_refusal(seed):
    rng = np.random.default_rng(seed)
    x = axis(400, 4000, 2.0)
    for y in (
        rng.normal(0, 1, len(x)),
        np.cumsum(rng.normal(0, 0.1, len(x))),
        np.zeros(len(x)),
        np.full(len(x), 5.0),
        rng.uniform(-1e6, 1e6, len(x)),
        np.sin(x / 3),
        np.where(x > 2000, 3.0, 0.0),
    ):
        result = analyse(
            block(x, y),
            conditions=LIQUID,
            params=PARAMS,
            table=TABLE,
            reference=ReferenceInput("r", block(*spectrum(ALCOHOL)), LIQUID),
        )
        json.dumps(result.to_json(), allow_nan=False)
        assert result.identity is None or result.identity.verdict != "consistent"


def test_identity_is_not_called_consistent_where_the_whole_fit_says_otherwise():
    doubtful = replace(RESULT.impurities, explained_variance=0.9)
    identity, _ = pipeline._in_agreement(RESULT.identity, doubtful, PARAMS)
    assert RESULT.identity.verdict == "consistent"
    assert identity.verdict == "consistent_with_differences" and identity.agrees == "neutral"
    assert "90.0 %" in identity.against[-1] and identity.would_decide
    assert pipeline._in_agreement(RESULT.identity, RESULT.impurities, PARAMS) == (RESULT.identity, RESULT.impurities)


def test_an_absence_is_not_called_good_beside_an_identity_that_fails():
    failed = replace(RESULT.identity, verdict="not_consistent", agrees="no")
    _, screened = pipeline._in_agreement(failed, RESULT.impurities, PARAMS)
    assert RESULT.impurities.screened[0].agrees == "yes"
    assert [(item.agrees, item.weight) for item in screened.screened] == [("neutral", "open")]
