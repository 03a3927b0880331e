"""What the numeric core hands from step to step: frozen records, read-only arrays, units in the names.

Nothing here knows a file system, a clock or a database. Wavenumbers are in cm-1 and always rise along an array.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np


class Severity(StrEnum):
    """How much a finding matters to somebody who is about to read the spectrum."""

    INFO = "info"
    WARNING = "warning"
    SERIOUS = "serious"


class Ordinate(StrEnum):
    """What the numbers of a spectrum mean."""

    ABSORBANCE = "absorbance"
    TRANSMITTANCE = "transmittance"  # as a fraction: 1 is everything
    PERCENT_TRANSMITTANCE = "percent_transmittance"
    REFLECTANCE = "reflectance"  # as a fraction; its meaning depends on the technique
    ABSORPTIVITY = "absorptivity"  # absorbance for each unit of amount and path: proportional to absorbance


class Technique(StrEnum):
    TRANSMISSION = "transmission"
    DISC = "disc"
    MULL = "mull"
    ATR = "atr"
    DIFFUSE = "diffuse"
    GAS_CELL = "gas_cell"


class Phase(StrEnum):
    LIQUID = "liquid"
    SOLID = "solid"
    FILM = "film"
    SOLUTION = "solution"
    GAS = "gas"


class AxisUnit(StrEnum):
    CM1 = "cm-1"
    MICROMETRE = "um"
    NANOMETRE = "nm"


@dataclass(frozen=True)
class Finding:
    """One remark about a file or a measurement, for people and programs.

    code : stable, dotted (``reader.npoints_differs``); message : one sentence with the numbers and their units;
    region_cm1 : (low, high) or None; line : 1-based line of the file or None; remedy : what to do, or empty.
    """

    code: str
    severity: Severity
    message: str
    region_cm1: tuple[float, float] | None = None
    line: int | None = None
    remedy: str = ""
    facts: Mapping[str, object] = field(default_factory=dict)


@dataclass(frozen=True)
class Problem:
    """Why a file or a block of it was refused, or which question a person has to answer first."""

    code: str
    message: str
    line: int | None = None
    remedy: str = ""
    question: str | None = (
        None  # None: refused; "x_unit", "ordinate" or "columns": the same bytes read once it is answered
    )


@dataclass(frozen=True)
class SpectrumBlock:
    """One spectrum as it was read, nothing corrected.

    x_cm1 : float64, shape (n,), strictly increasing, read-only. y : float64, shape (n,), finite, in `ordinate_used`
    (percent stays percent, absorbance stays absorbance), read-only.
    """

    index: int
    title: str
    x_cm1: np.ndarray
    y: np.ndarray
    ordinate_used: Ordinate
    ordinate_declared: str
    axis_unit_declared: str
    coding: str  # "AFFN", "PAC", "SQZ", "DIF", "DIFDUP", "XY", "delimited"
    self_checking: bool  # whether a changed digit would have been noticed
    evenly_spaced: bool
    headers: Mapping[str, str] = field(default_factory=dict)  # normalised label -> text, cleaned of NUL and surrogates
    findings: tuple[Finding, ...] = ()

    @property
    def spacing_cm1(self) -> float:
        """Mean distance between neighbouring points."""
        return float((self.x_cm1[-1] - self.x_cm1[0]) / (len(self.x_cm1) - 1))


@dataclass(frozen=True)
class RefusedBlock:
    """A block that was not read, with the reason and the place."""

    index: int
    title: str
    problem: Problem
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True)
class ReadResult:
    """Everything that one file held, block by block; `problem` is set when the file as a whole was refused."""

    sha256: str
    blocks: tuple[SpectrumBlock | RefusedBlock, ...] = ()
    problem: Problem | None = None


@dataclass(frozen=True)
class ReadOptions:
    """Answers a person gave to what the file leaves open. None means: not answered, so never guessed."""

    x_unit: AxisUnit | None = None
    ordinate: Ordinate | None = None
    columns: tuple[int, ...] | None = None  # 1-based ordinate columns of a delimited file; None: all of them
    technique: Technique | None = None


@dataclass(frozen=True)
class Conditions:
    """How the sample was measured, as recorded beside the spectrum. None means: not known."""

    technique: Technique | None = None
    phase: Phase | None = None
    resolution_cm1: float | None = None
    atr_crystal_index: float | None = None
    atr_angle_deg: float | None = None
    atr_reflections: int | None = None
    already_processed: str = ""  # what was done before the file was written, as stated: "" is "nothing stated"


def frozen_array(values: object) -> np.ndarray:
    """A read-only, contiguous float64 copy of `values`, shape kept."""
    array = np.array(values, dtype=np.float64, copy=True)
    array.setflags(write=False)
    return array
