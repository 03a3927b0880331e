"""Invented spectra with known bands, for tests that need the truth."""

from __future__ import annotations

import numpy as np

from spectra.core.types import Ordinate, SpectrumBlock, frozen_array


def lorentzian(x, position_cm1, height, fwhm_cm1):
    return height / (1 + (2 * (x - position_cm1) / fwhm_cm1) ** 2)


def gaussian(x, position_cm1, height, fwhm_cm1):
    return height * np.exp(-4 * np.log(2) * ((x - position_cm1) / fwhm_cm1) ** 2)


def axis(low_cm1=400.0, high_cm1=4000.0, step_cm1=1.0):
    return np.arange(low_cm1, high_cm1 + step_cm1 / 2, step_cm1)


def spectrum(bands, *, x=None, noise=2e-4, seed=1, offset=0.0, slope=0.0, shape=gaussian):
    """(x, absorbance) with the bands given as (position, height, width); slope is over the whole range."""
    x = axis() if x is None else x
    a = offset + slope * (x - x[0]) / (x[-1] - x[0])
    for position, height, width in bands:
        a = a + shape(x, position, height, width)
    return x, a + np.random.default_rng(seed).normal(0, noise, len(x))


def block(x, y, ordinate=Ordinate.ABSORBANCE, *, resolution_cm1=4.0, title="synthetic"):
    headers = {"RESOLUTION": f"{resolution_cm1:g}"} if resolution_cm1 else {}
    return SpectrumBlock(
        index=0,
        title=title,
        x_cm1=frozen_array(x),
        y=frozen_array(y),
        ordinate_used=ordinate,
        ordinate_declared=ordinate.value.upper(),
        axis_unit_declared="1/CM",
        coding="AFFN",
        self_checking=False,
        evenly_spaced=True,
        headers=headers,
    )


ESTER = [
    (2960, 0.35, 30),
    (2930, 0.3, 25),
    (2875, 0.25, 25),
    (1740, 0.9, 22),
    (1465, 0.2, 20),
    (1375, 0.25, 15),
    (1240, 1.0, 30),
    (1050, 0.5, 25),
    (850, 0.08, 15),
]
ALKANE = [
    (2960, 0.9, 25),
    (2925, 1.0, 25),
    (2872, 0.5, 18),
    (2855, 0.7, 18),
    (1466, 0.35, 15),
    (1378, 0.2, 10),
    (722, 0.08, 12),
]
ACID = [
    (3000, 0.55, 550),
    (2930, 0.3, 25),
    (1710, 1.0, 28),
    (1415, 0.25, 25),
    (1285, 0.45, 40),
    (940, 0.25, 55),
    (2650, 0.12, 150),
]
ALCOHOL = [
    (3330, 0.6, 250),
    (2970, 0.5, 25),
    (2930, 0.4, 25),
    (2880, 0.35, 25),
    (1455, 0.2, 20),
    (1380, 0.2, 15),
    (1050, 1.0, 35),
    (880, 0.3, 20),
]
