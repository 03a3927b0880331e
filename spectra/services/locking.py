"""One order of locks for everybody who writes about an examination, so that no two writers wait for each other.

The examination comes first, then whatever belongs to it (analysis, version, upload, spectrum), then the head of the
trail, which the unit of work takes last.
"""

from __future__ import annotations

from spectra.models import Examination


def locked_examination(pk: int | None) -> Examination | None:
    """The examination, locked until the end of the unit of work; None where there is none.

    Rows that only refer to it can still be added by others meanwhile (`no_key`).
    """
    return Examination.objects.select_for_update(no_key=True).filter(pk=pk).first()
