"""RESOLUTION in a file's header counts only where it can be one of a mid-infrared spectrum."""

from __future__ import annotations

import pytest

from tests import builders


@pytest.mark.parametrize(
    ("header", "used"),
    [
        ("2", 2.0),
        ("0.01", 0.01),
        ("64", 64.0),
        ("0.009", 4.0),
        ("64.1", 4.0),
        ("1E-300", 4.0),
        ("nan", 4.0),
        ("inf", 4.0),
        ("-2", 4.0),
        ("medium", 4.0),
    ],
)
def test_a_resolution_out_of_reach_gives_way_to_the_procedures(cast, lab, quick_computing, header, used):
    data = builders.jcamp_file(headers={"RESOLUTION": header})
    spectrum = builders.upload(builders.examination(cast, lab), cast.analyst, data=data).spectra.get()
    assert spectrum.resolution_cm1 == used
