"""The method's parameters: one home, strict both ways."""

import json

import pytest

from spectra.core.errors import CoreError
from spectra.core.params import REPRODUCTION_TOLERANCES, MethodParams


def test_they_survive_json():
    params = MethodParams(support_probability=0.92)
    assert MethodParams.from_dict(json.loads(json.dumps(params.to_dict()))) == params


@pytest.mark.parametrize(
    "change, word",
    [
        ({"surprise": 1.0}, "unknown: surprise"),
        ({"weak_level": "much"}, "finite number"),
        ({"largest_set": 2.5}, "whole"),
        ({"explanation_leaks": [1.0]}, "list of 5"),
        ({"noise_percentile": -1.0}, "negative"),
        ({"support_probability": 0.01}, "below"),
        ({"weak_level": float("nan")}, "finite"),
    ],
)
def test_a_wrong_value_is_refused_by_name(change, word):
    with pytest.raises(CoreError, match=word):
        MethodParams.from_dict({**MethodParams().to_dict(), **change})


def test_a_missing_key_is_named():
    values = MethodParams().to_dict()
    del values["weak_level"]
    with pytest.raises(CoreError, match="missing: weak_level"):
        MethodParams.from_dict(values)


def test_tolerances_are_positive():
    assert all(value > 0 for value in REPRODUCTION_TOLERANCES.values())
