"""Tables and parameters that people paste in are bounded before they cost anything."""

from __future__ import annotations

import pytest

from spectra.core import group_table
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams


@pytest.mark.parametrize(
    "text",
    ["a" + ".a" * 90_000 + "=1", "a=" + "[" * 90_000, "a=" + "9" * 90_000, "a=" + "[" * 1_900, "a.b.c.d.e.f.g = 1"],
    ids=["endless key", "endless nesting", "endless number", "nesting in a short line", "a deep key"],
)
def test_a_table_that_would_keep_the_parser_busy_is_refused_first(text):
    with pytest.raises(CoreError) as refused:
        group_table.load('version = "x"\n' + text)
    assert refused.value.problem.code in {"group_table.line_too_long", "group_table.too_deep", "group_table.syntax"}


@pytest.mark.parametrize("factor", [1e30, 1e-9, float("inf")])
def test_a_parameter_far_from_the_shipped_one_is_refused_by_name(factor):
    values = MethodParams().to_dict()
    name = next(key for key, value in values.items() if isinstance(value, float) and value > 0)
    with pytest.raises(CoreError) as refused:
        MethodParams.from_dict(values | {name: values[name] * factor})
    assert name in refused.value.problem.message


def test_the_shipped_parameters_are_read_back_as_they_are():
    assert MethodParams.from_dict(MethodParams().to_dict()) == MethodParams()
