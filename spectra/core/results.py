"""What an analysis hands out: frozen records for bands, group evidence, identity and impurities.

Positions and widths are in cm-1, heights in absorbance units of the spectrum (or relative units where a finding says
so), fractions are shares of the reference's strongest band. None means: not known or not computed, never zero.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, is_dataclass
from enum import Enum

import numpy as np

from spectra.core.types import Conditions, Finding, SpectrumBlock

GROUP_VERDICTS = ("supported", "contradicted", "undecided", "not_examined")
IDENTITY_VERDICTS = (
    "consistent",
    "consistent_with_differences",
    "not_consistent",
    "not_distinguishable",
    "cannot_be_compared",
)
IMPURITY_VERDICTS = ("found", "not_found_above_limit", "cannot_be_seen")


@dataclass(frozen=True)
class ReferenceInput:
    """The declared material's reference spectrum with its measuring conditions and what names it in the record."""

    name: str
    block: SpectrumBlock
    conditions: Conditions
    label: str = ""  # identifier or SHA-256


@dataclass(frozen=True)
class WatchInput:
    """One watch-list component: its reference shape and what names it in the record."""

    name: str
    block: SpectrumBlock
    conditions: Conditions
    label: str = ""


@dataclass(frozen=True)
class Mask:
    """A region that was not used, with the reason in words."""

    low_cm1: float
    high_cm1: float
    reason: str


@dataclass(frozen=True)
class Step:
    """One preparation step with its parameters, in the order in which it was applied."""

    step: str
    parameters: Mapping[str, object]


@dataclass(frozen=True)
class Band:
    """One absorption band. `kind`: "maximum", "shoulder" or "saturated"."""

    position_cm1: float
    position_uncertainty_cm1: float
    height_absorbance: float
    prominence_absorbance: float
    fwhm_cm1: float
    area_absorbance_cm1: float
    intensity: str  # vs, s, m, w, vw: relative to the strongest band
    shape: str  # sharp, medium, broad, very broad
    snr: float
    kind: str
    used_by: tuple[str, ...] = ()


@dataclass(frozen=True)
class LaneWindow:
    """One window of a group's evidence lane: what was found in it."""

    low_cm1: float
    high_cm1: float
    label: str
    role: str
    state: str  # found, missing, not_readable
    band_positions_cm1: tuple[float, ...] = ()


@dataclass(frozen=True)
class Lane:
    """The evidence lane of one group."""

    group: str
    label: str
    verdict: str
    windows: tuple[LaneWindow, ...]


@dataclass(frozen=True)
class GroupClaim:
    """The verdict on one group with its ledger: plain sentences for and against."""

    group: str
    label: str
    verdict: str
    probability: float | None
    weight: str
    agrees: str
    for_: tuple[str, ...]
    against: tuple[str, ...]
    would_decide: tuple[str, ...]
    hazard: str | None = None
    note: str = ""
    members: tuple[str, ...] = ()  # of a wider class: the groups that it stands for


@dataclass(frozen=True)
class Metric:
    """One whole-curve figure with everything needed to compute it again; none of them decides alone."""

    name: str
    value: float
    formula: str
    region_cm1: tuple[float, float]
    pretreatment: str


@dataclass(frozen=True)
class BandDifference:
    """A band that one spectrum has and the other lacks, or that differs in size (`ratio` sample over reference)."""

    position_cm1: float
    height_absorbance: float
    snr: float | None = None
    ratio: float | None = None


@dataclass(frozen=True)
class Identity:
    """Comparison with the declared material's reference."""

    verdict: str
    agrees: str
    reference: str
    weight: str
    for_: tuple[str, ...]
    against: tuple[str, ...]
    would_decide: tuple[str, ...]
    metrics: tuple[Metric, ...]
    bands_compared: int
    missing_bands: tuple[BandDifference, ...]
    extra_bands: tuple[BandDifference, ...]
    size_outliers: tuple[BandDifference, ...]


@dataclass(frozen=True)
class Screened:
    """One watch-list component. Fractions are shares of peak height, not of mass."""

    name: str
    verdict: str
    agrees: str
    estimate_fraction: float | None
    standard_uncertainty: float | None
    significance: float | None
    decision_limit_fraction: float | None
    detection_limit_fraction: float | None
    scale: str
    weight: str
    for_: tuple[str, ...] = ()
    against: tuple[str, ...] = ()
    would_decide: tuple[str, ...] = ()


@dataclass(frozen=True)
class Unexplained:
    """A band of the residual that neither reference nor watch list explains."""

    position_cm1: float
    height_absorbance: float
    snr: float


@dataclass(frozen=True)
class Impurities:
    """What the declared reference leaves over."""

    screened: tuple[Screened, ...]
    unexplained: tuple[Unexplained, ...]
    explained_variance: float
    residual_fraction: float
    smallest_claim_fraction: float | None
    notes: tuple[str, ...]


@dataclass(frozen=True)
class Prepared:
    """A spectrum on the working grid: what every later step reads.

    x_cm1, absorbance, baseline, corrected, smooth, noise : float64, shape (n,); `absorbance` and `corrected` are NaN
    where `usable` is False. noise is the standard deviation of the smoothed trace at each point.
    """

    x_cm1: np.ndarray
    absorbance: np.ndarray
    baseline: np.ndarray
    corrected: np.ndarray
    smooth: np.ndarray
    noise: np.ndarray
    usable: np.ndarray
    unreliable: np.ndarray
    masks: tuple[Mask, ...]
    steps: tuple[Step, ...]
    findings: tuple[Finding, ...]
    noise_absorbance: float
    resolution_cm1: float
    relative: bool  # heights are relative to the strongest band: the ordinate carries no absolute absorbance

    @property
    def step_cm1(self) -> float:
        """Distance between neighbouring grid points."""
        return float(self.x_cm1[1] - self.x_cm1[0])


@dataclass(frozen=True)
class AnalysisResult:
    """The whole analysis. `body` holds JSON types only; `curves` the traces on the working grid (NaN where masked)."""

    body: Mapping[str, object]
    digest: str
    curves: Mapping[str, np.ndarray]
    bands: tuple[Band, ...] = ()
    groups: tuple[GroupClaim, ...] = ()
    findings: tuple[Finding, ...] = ()
    identity: Identity | None = None
    impurities: Impurities | None = None

    def to_json(self) -> dict[str, object]:
        """The result as JSON types: finite numbers, text, lists and dictionaries."""
        return dict(self.body)


def plain(value: object) -> object:
    """JSON types from records, arrays and numpy numbers; a number that is not finite is refused."""
    if isinstance(value, Enum):
        return value.value
    if value is None or isinstance(value, (str, bool)):
        return value
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        if not math.isfinite(number):
            raise ValueError("a result holds a number that is not finite")
        return number
    if is_dataclass(value):
        return {item.name.rstrip("_"): plain(getattr(value, item.name)) for item in fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (Sequence, np.ndarray)):
        return [plain(item) for item in value]
    raise TypeError(f"no JSON form for {type(value).__name__}")
