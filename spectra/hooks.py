"""Where the layer above hooks in, so that spectra need not know it. Registered once, from `AppConfig.ready()`."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from labsite.accounts.models import User
    from spectra.models import Analysis, Examination

# Called inside the unit of work that finishes an analysis: drafts the claims from it.
on_analysis_done: list[Callable[[Analysis], None]] = []
# Called before the evidence of an examination changes; raises NotPossible where its interpretation forbids that.
before_evidence_changes: list[Callable[[Examination, User], None]] = []
# Called by every round of the sweep: what the layer above lets time do.
each_sweep: list[Callable[[], object]] = []


def analysis_done(analysis: Analysis) -> None:
    for hook in on_analysis_done:
        hook(analysis)


def evidence_may_change(examination: Examination, by: User) -> None:
    for hook in before_evidence_changes:
        hook(examination, by)


def swept() -> None:
    for hook in each_sweep:
        hook()
