"""The gate: arrays that pass it are trusted everywhere behind it."""

import numpy as np
import pytest

from spectra.core.checks import SHORTEST_TRACE_POINTS, as_trace, as_values
from spectra.core.errors import CoreError

X = np.arange(400.0, 420.0)


def test_trusted_arrays_are_read_only_copies():
    source = X.copy()
    x, y = as_trace(source, [1] * len(X))
    source[0] = -1
    assert x[0] == 400 and x.dtype == y.dtype == np.float64 and not x.flags.writeable and not y.flags.writeable


@pytest.mark.parametrize(
    "view", [X[::2], X[::-1][::-1], np.asfortranarray(X), X.astype(np.float32), X.astype(int), list(X)]
)
def test_any_layout_of_numbers_is_taken(view):
    x, _ = as_trace(view, np.zeros(len(view)))
    assert x.flags.c_contiguous and x.tolist() == [float(value) for value in view]


@pytest.mark.parametrize(
    ("x", "y", "code"),
    [
        (X, np.zeros(len(X) - 1), "trace.lengths_differ"),
        (X[: SHORTEST_TRACE_POINTS - 1], np.zeros(SHORTEST_TRACE_POINTS - 1), "trace.too_short"),
        ([], [], "trace.too_short"),
        (X[::-1], np.zeros(len(X)), "trace.x_not_increasing"),
        (np.repeat(X[:10], 2), np.zeros(len(X)), "trace.x_not_increasing"),
        (X, np.where(X == 405, np.nan, 0), "trace.not_finite"),
        (np.where(X == 405, np.inf, X), np.zeros(len(X)), "trace.not_finite"),
        (X.reshape(4, 5), np.zeros(len(X)), "trace.not_one_dimensional"),
        (5.0, 5.0, "trace.not_one_dimensional"),
        (["a"] * 20, np.zeros(len(X)), "trace.not_numbers"),
        ([[1], [1, 2]], np.zeros(len(X)), "trace.not_numbers"),
        (None, None, "trace.not_one_dimensional"),
    ],
)
def test_what_is_no_trace_is_refused(x, y, code):
    with pytest.raises(CoreError) as refusal:
        as_trace(x, y)
    assert refusal.value.problem.code == code


def test_the_refusal_names_the_array():
    with pytest.raises(CoreError, match=r"^weights holds 1 values that are not finite, the first at point 2"):
        as_values([1.0, np.nan], "weights")
