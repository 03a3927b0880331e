"""What this layer guards in the database itself, what verification checks, and where it hooks into the layer below."""

from __future__ import annotations

from labsite.errors import NotPossible
from labsite.trail.verify import register_verifier
from reviews.integrity import guards
from reviews.integrity.versions import damaged_interpretations
from reviews.selectors import latest_version
from reviews.services.drafts import draft_from_analysis
from reviews.services.reviewing import return_overdue
from reviews.transitions import State
from spectra import hooks


def register() -> None:
    hooks.on_analysis_done.append(draft_from_analysis)
    hooks.before_evidence_changes.append(evidence_may_change)
    hooks.each_sweep.append(return_overdue)
    guards.register()
    register_verifier("interpretations", damaged_interpretations)


def evidence_may_change(examination, by) -> None:
    """Files and roles change only while the interpretation is a draft, or before there is one."""
    version = latest_version(examination)
    if version is None or version.state == State.DRAFT:
        return
    if version.state in (State.SUBMITTED, State.READING_BLIND, State.IN_REVIEW):
        raise NotPossible(
            "examination.with_reviewer",
            f"Version {version.number} is with a reviewer, so its evidence stays as it was signed.",
            remedy="Wait for the decision. If it is rejected, revise it and bring in the file then.",
        )
    raise NotPossible(
        "examination.decided",
        f"Version {version.number} is {version.get_state_display()}, so its evidence stays as it was signed.",
        remedy="Revise the interpretation first; then files can be added to the new version.",
    )
