"""How records of this layer are named in the trail: a search for a sample's number finds its examination too."""

from __future__ import annotations

from labsite.trail.events import Subject
from spectra.models import Examination


def examination_subject(examination: Examination) -> Subject:
    """The examination with the numbers of its samples, by which people know it."""
    codes = ", ".join(examination.samples.order_by("pk").values_list("code", flat=True))
    return Subject("examination", str(examination.pk), f"{examination.code} ({codes})" if codes else examination.code)
