"""Every number that steers the analysis, with its default: the only home of defaults.

A method version stores `MethodParams.to_dict()`; `MethodParams.from_dict` accepts exactly those keys and no others.
`REPRODUCTION_TOLERANCES` says how far a repeated analysis may differ from the stored one before it counts as different.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields

from spectra.core.errors import CoreError


@dataclass(frozen=True)
class MethodParams:
    """Numeric parameters of one method version. Units are in the names; ratios and counts carry none."""

    # measurement
    unreliable_absorbance: float = 1.5  # above this the height of a band is not believed
    masked_absorbance: float = 2.0  # above this the points are not used at all
    weak_absorbance: float = 0.05  # a strongest band below this is too weak to judge absences
    low_signal_to_noise: float = 100.0
    lowest_signal_to_noise: float = 20.0
    noise_window_points: int = 20
    noise_percentile: float = 20.0
    noise_percentile_ratio: float = 0.90  # what that percentile reads on white noise, as a share of the true value
    vapour_significance: float = 5.0
    fringe_explained: float = 0.7
    fringe_signal_to_noise: float = 5.0
    fringe_refractive_index: float = 1.5
    excess_transmittance: float = 0.05
    steep_baseline_absorbance: float = 0.3
    complete_range_low_cm1: float = 700.0
    complete_range_high_cm1: float = 3800.0

    # preparation
    working_resolution_cm1: float = 4.0
    finest_grid_step_cm1: float = 1.0
    largest_grid_step_cm1: float = 8.0
    baseline_period_cm1: float = 2000.0
    baseline_tolerance: float = 1e-3
    baseline_iterations: int = 50

    # bands
    prominence_in_noise: float = 6.0  # of the smoothed trace, locally
    prominence_floor_of_strongest: float = 0.005
    position_points: int = 9
    clear_signal_to_noise: float = 50.0
    sharp_width_cm1: float = 15.0
    medium_width_cm1: float = 40.0
    broad_width_cm1: float = 120.0
    very_strong_level: float = 0.75  # share of the strongest band's height
    strong_level: float = 0.40
    medium_level: float = 0.12
    weak_level: float = 0.03
    absent_level: float = 0.004
    shoulder_in_noise: float = 6.0
    axis_uncertainty_cm1: float = 0.3  # scale error that an unchecked instrument is granted, added to each position

    # groups
    support_probability: float = 0.90
    class_probability: float = 0.95  # for a wider class none of whose members is supported
    pattern_probability: float = 0.60  # enough when every diagnostic and companion band is there
    contradiction_probability: float = 0.05
    largest_set: int = 5
    candidate_limit: int = 16
    explanation_leaks: tuple[float, float, float, float, float] = (1.0, 0.75, 0.35, 0.08, 0.02)
    explanation_temperature: float = 1.2
    edge_softness_cm1: float = 10.0
    unknown_phase_widening_cm1: float = 10.0
    contradiction_evidence: float = (
        1.5  # natural logarithm: what the missing bands themselves must speak against a group
    )

    # identity
    identity_resolution_cm1: float = 8.0
    identity_window_cm1: float = 6.0
    identity_wide_window_share: float = 0.15  # of a band's width, added for broad bands
    identity_band_level: float = 0.03  # reference bands below this share of the strongest are not demanded
    identity_extra_level: float = 0.05
    identity_size_ratio: float = 2.0
    identity_shift_cm1: float = 4.0  # largest common axis shift that is allowed for
    identity_consistent_score: float = 0.80
    identity_different_score: float = 0.65
    identity_found_share: float = 0.90
    identity_found_weight: float = 0.85  # by height, for "consistent with differences"
    identity_masked_share: float = 0.35
    fingerprint_limit_cm1: float = 1500.0

    # impurities
    impurity_baseline_degree: int = 4
    impurity_shift_cm1: float = 3.0
    impurity_significance: float = 5.0
    impurity_floor_fraction: float = 0.002
    explained_variance: float = 0.95
    repeat_residual_small: float = 0.003
    repeat_residual_large: float = 0.01
    limit_small_residual: float = 0.01
    limit_medium_residual: float = 0.05
    limit_large_residual: float = 0.10
    unexplained_significance: float = 7.0
    unexplained_floor_fraction: float = 0.005
    masked_detection_limit: float = 0.30  # a detection limit above this means: cannot be seen here
    multiplicative_noise: float = 0.002

    def __post_init__(self) -> None:
        for item in fields(self):
            value = getattr(self, item.name)
            numbers = value if isinstance(value, tuple) else (value,)
            if not all(isinstance(n, (int, float)) and not isinstance(n, bool) and math.isfinite(n) for n in numbers):
                raise CoreError(
                    "params.not_a_number", f"Parameter {item.name} has to be a finite number.", remedy="Enter a number."
                )
            if any(n < 0 for n in numbers):
                raise CoreError(
                    "params.negative",
                    f"Parameter {item.name} must not be negative.",
                    remedy="Enter zero or a positive number.",
                )
        if self.contradiction_probability >= self.support_probability:
            raise CoreError(
                "params.order",
                "contradiction_probability has to lie below support_probability.",
                remedy="Choose a smaller contradiction_probability.",
            )
        if not self.unreliable_absorbance <= self.masked_absorbance:
            raise CoreError(
                "params.order",
                "unreliable_absorbance must not exceed masked_absorbance.",
                remedy="Choose a smaller unreliable_absorbance.",
            )
        if self.finest_grid_step_cm1 <= 0 or self.working_resolution_cm1 <= 0:
            raise CoreError(
                "params.grid",
                "Grid step and working resolution have to be above zero.",
                remedy="Enter positive numbers in cm-1.",
            )

    def to_dict(self) -> dict[str, object]:
        """Plain JSON types, one key for each parameter."""
        return {key: list(value) if isinstance(value, tuple) else value for key, value in asdict(self).items()}

    @classmethod
    def from_dict(cls, values: Mapping[str, object]) -> MethodParams:
        """The inverse of `to_dict`. Missing and unknown keys are refused by name, so is a value of another kind."""
        known = {item.name: item for item in fields(cls)}
        unknown, missing = sorted(set(values) - set(known)), sorted(set(known) - set(values))
        if unknown or missing:
            named = "; ".join(
                part
                for part in (
                    f"unknown: {', '.join(unknown)}" if unknown else "",
                    f"missing: {', '.join(missing)}" if missing else "",
                )
                if part
            )
            raise CoreError(
                "params.keys",
                f"The parameter list does not fit this version ({named}).",
                remedy="Start from the parameters of the present version.",
            )
        given: dict[str, object] = {}
        for name, item in known.items():
            value = values[name]
            default = item.default
            if isinstance(default, tuple):
                if not isinstance(value, (list, tuple)) or len(value) != len(default):
                    raise CoreError(
                        "params.kind",
                        f"Parameter {name} has to be a list of {len(default)} numbers.",
                        remedy="Enter the numbers in order.",
                    )
                value = tuple(value)
            elif isinstance(default, int) and not (isinstance(value, int) and not isinstance(value, bool)):
                raise CoreError(
                    "params.kind", f"Parameter {name} has to be a whole number.", remedy="Enter a whole number."
                )
            elif isinstance(default, float) and isinstance(value, int) and not isinstance(value, bool):
                value = float(value)
            for number, usual in zip(_numbers(value), _numbers(default), strict=True):
                _judge_size(name, number, usual)
            given[name] = value
        return cls(**given)


# How far a parameter may lie from the shipped one: beyond it an analysis would take hours or mean nothing.
SIZE_FACTOR = 100


def _numbers(value: object) -> tuple[object, ...]:
    return value if isinstance(value, tuple) else (value,)


def _judge_size(name: str, number: object, usual: object) -> None:
    """Refuse a number that lies orders of magnitude from the shipped value of its parameter; others judge its kind."""
    if not all(isinstance(n, (int, float)) and not isinstance(n, bool) and math.isfinite(n) for n in (number, usual)):
        return
    most = SIZE_FACTOR * max(abs(usual), 1.0)
    least = abs(usual) / SIZE_FACTOR if usual else 0.0
    if abs(number) > most or (usual and abs(number) < least):
        raise CoreError(
            "params.size",
            f"Parameter {name} is {number:g}; it has to lie between {least:g} and {most:g}.",
            remedy="Stay within a factor of a hundred of the shipped value.",
        )


# Absolute differences within which a repeated result counts as equal; another processor moves last bits, not these.
REPRODUCTION_TOLERANCES: Mapping[str, float] = {
    "position_cm1": 0.01,
    "position_uncertainty_cm1": 0.01,
    "fwhm_cm1": 0.05,
    "height_absorbance": 1e-5,
    "prominence_absorbance": 1e-5,
    "area_absorbance_cm1": 1e-3,
    "snr": 0.5,
    "noise_absorbance": 1e-7,
    "estimate_fraction": 1e-5,
    "standard_uncertainty": 1e-5,
    "detection_limit_fraction": 1e-5,
    "significance": 0.05,
    "value": 1e-4,
}
