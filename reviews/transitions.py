"""The life of one interpretation version, as one table that a chemist can read. Pure: no Django, no database.

A version is a draft until its analyst submits it with a signature; a reviewer takes it, or hands it back, or it goes
back by itself when the time is up; in a blind second reading the reviewer first records an own reading, and only then
sees the analyst's. Exactly one decision ends it. A rejected version is revised as a new one; an approved one can be
withdrawn by a QA manager, or is superseded when a later version of the same interpretation is approved. Nothing leads
back from an end.
"""

from __future__ import annotations

from enum import StrEnum


class State(StrEnum):
    DRAFT = "draft"
    SUBMITTED = "submitted"
    READING_BLIND = "reading_blind"
    IN_REVIEW = "in_review"
    APPROVED = "approved"
    REJECTED = "rejected"
    WITHDRAWN = "withdrawn"
    SUPERSEDED = "superseded"


class Action(StrEnum):
    EDIT = "edit"  # claims and conclusion of a draft
    SUBMIT = "submit"
    TAKE = "take"
    TAKE_BLIND = "take_blind"
    REVEAL = "reveal"  # the reviewer's own reading is recorded; now both are laid side by side
    HAND_BACK = "hand_back"
    TIME_OUT = "time_out"
    OPEN_POINT = "open_point"  # open or judge a must-see point, write about a disagreement
    ANSWER = "answer"  # the analyst answers a disagreement
    APPROVE = "approve"
    REJECT = "reject"
    REVISE = "revise"  # makes the next version; this one stays as it is
    WITHDRAW = "withdraw"
    SUPERSEDE = "supersede"


class Actor(StrEnum):
    """Who may act, beyond holding a role."""

    ANALYST = "analyst"  # holds the role
    REVIEWER = "reviewer"  # holds the role and contributed nothing
    TAKER = "taker"  # the reviewer who took this version
    QA_MANAGER = "qa_manager"
    SYSTEM = "system"  # a consequence of another act or of time


TRANSITIONS: dict[tuple[State, Action], tuple[State, Actor]] = {
    (State.DRAFT, Action.EDIT): (State.DRAFT, Actor.ANALYST),
    (State.DRAFT, Action.SUBMIT): (State.SUBMITTED, Actor.ANALYST),
    (State.SUBMITTED, Action.TAKE): (State.IN_REVIEW, Actor.REVIEWER),
    (State.SUBMITTED, Action.TAKE_BLIND): (State.READING_BLIND, Actor.REVIEWER),
    (State.READING_BLIND, Action.REVEAL): (State.IN_REVIEW, Actor.TAKER),
    (State.READING_BLIND, Action.HAND_BACK): (State.SUBMITTED, Actor.TAKER),
    (State.READING_BLIND, Action.TIME_OUT): (State.SUBMITTED, Actor.SYSTEM),
    (State.IN_REVIEW, Action.OPEN_POINT): (State.IN_REVIEW, Actor.TAKER),
    (State.IN_REVIEW, Action.ANSWER): (State.IN_REVIEW, Actor.ANALYST),
    (State.IN_REVIEW, Action.HAND_BACK): (State.SUBMITTED, Actor.TAKER),
    (State.IN_REVIEW, Action.TIME_OUT): (State.SUBMITTED, Actor.SYSTEM),
    (State.IN_REVIEW, Action.APPROVE): (State.APPROVED, Actor.TAKER),
    (State.IN_REVIEW, Action.REJECT): (State.REJECTED, Actor.TAKER),
    (State.REJECTED, Action.REVISE): (State.REJECTED, Actor.ANALYST),
    (State.APPROVED, Action.REVISE): (State.APPROVED, Actor.ANALYST),
    (State.WITHDRAWN, Action.REVISE): (State.WITHDRAWN, Actor.ANALYST),
    (State.APPROVED, Action.WITHDRAW): (State.WITHDRAWN, Actor.QA_MANAGER),
    (State.APPROVED, Action.SUPERSEDE): (State.SUPERSEDED, Actor.SYSTEM),
}

OPEN_STATES = (
    State.DRAFT,
    State.SUBMITTED,
    State.READING_BLIND,
    State.IN_REVIEW,
)  # one of them for each interpretation
DECIDED_STATES = (State.APPROVED, State.REJECTED, State.WITHDRAWN, State.SUPERSEDED)
WITH_REVIEWER = (State.READING_BLIND, State.IN_REVIEW)

STATE_WORDS: dict[State, str] = {
    State.DRAFT: "being interpreted",
    State.SUBMITTED: "waiting for a second reading",
    State.READING_BLIND: "being read blind",
    State.IN_REVIEW: "being reviewed",
    State.APPROVED: "approved",
    State.REJECTED: "rejected",
    State.WITHDRAWN: "withdrawn by QA",
    State.SUPERSEDED: "superseded by a later version",
}


def next_state(state: State, action: Action) -> State | None:
    """The state that `action` leads to, or None when it is not possible in `state`."""
    step = TRANSITIONS.get((state, action))
    return step[0] if step else None


def actor_for(state: State, action: Action) -> Actor | None:
    """Who may take `action` in `state`, or None when nobody can."""
    step = TRANSITIONS.get((state, action))
    return step[1] if step else None
