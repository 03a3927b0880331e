"""Screening on mixtures with known amounts: found, not found with its limit, or not to be seen here."""

import numpy as np
import pytest

from spectra.core import impurities, preparation
from spectra.core.params import MethodParams
from spectra.core.results import IMPURITY_VERDICTS
from spectra.core.types import Conditions, Ordinate, Phase, Technique
from tests.numeric.synthetic import ALCOHOL, ALKANE, ESTER, axis, block, spectrum

PARAMS = MethodParams()
FILM = Conditions(phase=Phase.LIQUID, technique=Technique.TRANSMISSION)
SILICONE = [(1261, 0.8, 12), (1095, 0.9, 70), (1020, 1.0, 60), (800, 0.9, 25), (2962, 0.3, 15)]


def prepared(x, y):
    return preparation.prepare(block(x, y), FILM, PARAMS)


def mixture(fraction, component, *, seed=5, noise=1e-3):
    """The ester with a share of the component's peak height, another thickness, a drift and a small axis shift."""
    x, main = spectrum([(p + 0.3, h, w * 1.01) for p, h, w in ESTER], noise=0)
    _, other = spectrum(component, noise=0)
    a = 0.9 * (main / main.max() + fraction * other / other.max()) + 0.02 + 0.01 * (x - 400) / 3600
    return prepared(x, a + np.random.default_rng(seed).normal(0, noise, len(x)))


WATCH = tuple(
    impurities.Candidate(name, prepared(*spectrum(shape, noise=1e-5)), FILM)
    for name, shape in (("silicone", SILICONE), ("hydrocarbon", ALKANE), ("alcohol", ALCOHOL))
)
REFERENCE = prepared(*spectrum(ESTER, noise=2e-4, seed=9))


def screened(sample, watch=WATCH):
    return impurities.screen(sample, FILM, REFERENCE, FILM, watch, PARAMS)[0]


def test_a_pure_sample_raises_no_alarm():
    for seed in range(8):
        found = screened(mixture(0.0, SILICONE, seed=seed))
        assert [s.verdict for s in found.screened] == ["not_found_above_limit"] * 3
        assert all(s.agrees == "yes" for s in found.screened)
        assert not found.unexplained


@pytest.mark.parametrize("fraction", [0.01, 0.03])
def test_a_listed_contaminant_is_found_named_and_estimated(fraction):
    found = screened(mixture(fraction, SILICONE))
    first = found.screened[0]
    assert first.verdict == "found" and first.agrees == "no"
    assert first.estimate_fraction == pytest.approx(fraction, abs=max(4 * first.standard_uncertainty, 0.1 * fraction))
    assert [s.verdict for s in found.screened[1:]] == ["not_found_above_limit"] * 2


def test_decision_and_detection_limit_are_two_numbers():
    for item in screened(mixture(0.0, SILICONE)).screened:
        assert 0 < item.decision_limit_fraction < item.detection_limit_fraction
        assert item.scale == "fraction of peak height"


def test_twice_the_detection_limit_is_found():
    limit = screened(mixture(0.0, SILICONE)).screened[0].detection_limit_fraction
    for seed in range(6):
        assert screened(mixture(2 * limit, SILICONE, seed=seed)).screened[0].verdict == "found"


def test_two_contaminants_at_once():
    x, main = spectrum(ESTER, noise=0)
    _, one = spectrum(SILICONE, noise=0)
    _, two = spectrum(ALCOHOL, noise=0)
    a = main / main.max() + 0.02 * one / one.max() + 0.03 * two / two.max()
    found = screened(prepared(x, a + np.random.default_rng(1).normal(0, 1e-3, len(x))))
    assert [s.verdict for s in found.screened] == ["found", "not_found_above_limit", "found"]


def test_what_is_not_on_the_list_shows_as_unexplained():
    found = screened(mixture(0.03, SILICONE), WATCH[1:])
    assert found.unexplained
    strongest = found.unexplained[0].position_cm1
    assert min(abs(strongest - p) for p, _, _ in SILICONE) < 15


def test_another_material_is_refused_before_an_impurity_is_named():
    found = screened(prepared(*spectrum(ALCOHOL, noise=1e-3)))
    assert found.explained_variance < PARAMS.explained_variance
    assert {s.verdict for s in found.screened} == {"cannot_be_seen"}
    assert any("declared material itself is in doubt" in note for note in found.notes)


def test_twice_the_points_by_interpolation_change_no_verdict():
    x, main = spectrum(ESTER, noise=0, x=axis(step_cm1=2.0))
    _, other = spectrum(SILICONE, noise=0, x=x)
    for fraction in (0.0, 0.004, 0.02):
        a = main / main.max() + fraction * other / other.max() + np.random.default_rng(4).normal(0, 1e-3, len(x))
        fine = axis(400, 4000, 1.0)
        one, two = screened(prepared(x, a)), screened(prepared(fine, np.interp(fine, x, a)))
        assert [s.verdict for s in one.screened] == [s.verdict for s in two.screened]


def test_a_component_of_another_phase_cannot_be_seen():
    gas = impurities.Candidate("vapour", WATCH[0].prepared, Conditions(phase=Phase.GAS, technique=Technique.GAS_CELL))
    item = screened(mixture(0.02, SILICONE), (gas,)).screened[0]
    assert item.verdict == "cannot_be_seen" and item.estimate_fraction is None and item.agrees == "neutral"


def test_a_component_equal_to_the_material_cannot_be_seen():
    twin = impurities.Candidate("twin", REFERENCE, FILM)
    assert screened(mixture(0.0, SILICONE), (twin,)).screened[0].verdict == "cannot_be_seen"


def test_no_result_claims_purity():
    found = screened(mixture(0.0, SILICONE))
    assert {s.verdict for s in found.screened} <= set(IMPURITY_VERDICTS)
    assert any("neither purity" in note for note in found.notes)


def saturated(shape, reference=ESTER):
    """Screening of a specimen so thick that the largest bands of `shape` let nothing through."""
    x, a = spectrum(shape, noise=2e-4)
    sample = preparation.prepare(block(x, 10.0**-a, Ordinate.TRANSMITTANCE), FILM, PARAMS)
    assert sample.masks
    return impurities.screen(sample, FILM, prepared(*spectrum(reference, noise=2e-4, seed=9)), FILM, WATCH, PARAMS)[0]


def test_nothing_is_cleared_on_a_scale_that_is_totally_absorbed():
    found = saturated([(p, 3.5 * h, w) for p, h, w in ESTER])
    assert {s.verdict for s in found.screened} == {"cannot_be_seen"}
    assert {s.agrees for s in found.screened} == {"neutral"}
    assert all("totally absorbed" in s.against[0] for s in found.screened)
    assert found.smallest_claim_fraction is None


def test_a_band_nearly_as_strong_stands_in_for_an_absorbed_one_and_is_named():
    reference = [(p, 1.0 if p == 1240 else 0.97 if p == 1050 else h, w) for p, h, w in ESTER]
    thick = [(p, 2.3 if p == 1240 else 1.75 if p == 1050 else 1.8 * h, w) for p, h, w in reference]
    found = saturated(thick, reference)
    assert any("1240" in note and "1050" in note and "counted from" in note for note in found.notes)


@pytest.mark.parametrize(("z", "verdict"), [(-1.5, "not_found_above_limit"), (-3.0, "not_found_above_limit")])
def test_an_estimate_far_below_zero_widens_its_uncertainty(z, verdict):
    item = judged(z)
    assert item.verdict == verdict
    assert item.significance == pytest.approx(max(z, -2.0))
    assert item.standard_uncertainty == pytest.approx(0.01 * max(1.0, -z / 2))
    assert item.detection_limit_fraction >= judged(0.0).detection_limit_fraction
    assert any("below zero" in sentence for sentence in item.against) == (z < -2)


def test_an_estimate_too_far_below_zero_clears_nothing():
    item = judged(-4.2)
    assert item.verdict == "cannot_be_seen" and item.agrees == "neutral"
    assert "negative amount" in item.against[0]


def judged(z, sigma=0.01):
    component = impurities._Judged(WATCH[0], np.zeros(1), np.zeros(1), 1.0)
    solved = impurities._Solved({"silicone": z * sigma}, {"silicone": sigma}, np.zeros(1), np.zeros(1), 1.0, 1.0, 0.0)
    return impurities._judge(component, solved, 0.002, "", PARAMS)


def test_a_residual_band_is_never_higher_than_the_sample_itself():
    for sample in (ALCOHOL, SILICONE, [*ESTER, (1600, 0.5, 20)]):
        x, a = spectrum(sample, noise=1e-3)
        ready = prepared(x, a)
        for band in screened(ready, ()).unexplained:
            assert band.height_absorbance <= np.interp(band.position_cm1, ready.x_cm1, ready.smooth) + 0.01
