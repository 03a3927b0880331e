"""The gate: what comes in leaves as trusted arrays or as a refusal; nothing behind it checks again."""

from __future__ import annotations

import numpy as np

from spectra.core.errors import CoreError
from spectra.core.types import frozen_array

SHORTEST_TRACE_POINTS = 8  # fewer points cannot show a band with a baseline on both sides


def as_values(values: object, name: str = "y") -> np.ndarray:
    """A read-only float64 copy of `values`, one-dimensional and finite.

    Raises CoreError: ``trace.not_numbers``, ``trace.not_one_dimensional``, ``trace.not_finite``.
    """
    try:
        array = frozen_array(values)
    except (TypeError, ValueError) as error:
        raise CoreError("trace.not_numbers", f"{name} does not hold numbers.") from error
    if array.ndim != 1:
        raise CoreError("trace.not_one_dimensional", f"{name} has {array.ndim} dimensions; one is needed.")
    unusable = np.flatnonzero(~np.isfinite(array))
    if len(unusable):
        raise CoreError(
            "trace.not_finite",
            f"{name} holds {len(unusable)} values that are not finite, the first at point {unusable[0] + 1}.",
        )
    return array


def as_trace(x: object, y: object) -> tuple[np.ndarray, np.ndarray]:
    """Two read-only float64 arrays of one length, shape (n,), finite; x strictly increasing, n >=
    SHORTEST_TRACE_POINTS.

    x : positions, in cm-1 or in another unit that the caller names; y : ordinates in any unit.
    Raises CoreError with ``trace.not_numbers``, ``trace.not_one_dimensional``, ``trace.not_finite``,
    ``trace.lengths_differ``, ``trace.too_short`` or ``trace.x_not_increasing``.
    """
    x, y = as_values(x, "x"), as_values(y, "y")
    if len(x) != len(y):
        raise CoreError("trace.lengths_differ", f"x has {len(x)} points and y has {len(y)}.")
    if len(x) < SHORTEST_TRACE_POINTS:
        raise CoreError(
            "trace.too_short", f"The trace has {len(x)} points; at least {SHORTEST_TRACE_POINTS} are needed."
        )
    falls = np.flatnonzero(np.diff(x) <= 0)
    if len(falls):
        place = int(falls[0])
        raise CoreError(
            "trace.x_not_increasing",
            f"x does not increase from point {place + 1} ({x[place]:.10g}) to the next ({x[place + 1]:.10g}).",
        )
    return x, y
