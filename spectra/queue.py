"""Rings for the workers. A lost ring loses nothing: the row waits, and the sweep rings again."""

from __future__ import annotations

import logging
from functools import partial

from django.db import transaction

log = logging.getLogger(__name__)


def ring_after_commit(analysis_id: int) -> None:
    """Ring once the row is there to be found. A broker that is down must not turn a saved upload into an error."""
    transaction.on_commit(partial(ring, analysis_id), robust=True)


def ring(analysis_id: int) -> None:
    """Tell the workers that an analysis waits; a broker that does not answer is noted and left to the sweep."""
    from spectra.tasks import run_analysis

    try:
        run_analysis.apply_async(args=[analysis_id], retry=False, ignore_result=True)
    except Exception as error:  # noqa: BLE001 - kombu raises many kinds; none may reach the person who uploaded
        log.warning("The message queue did not take analysis %s: %s", analysis_id, error)
