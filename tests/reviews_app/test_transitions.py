"""The state table: complete, and enforced for every state, action and kind of person."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import pytest

from labsite.errors import NotAllowed, NotPossible
from reviews import permissions
from reviews.models import InterpretationVersion
from reviews.transitions import (
    DECIDED_STATES,
    OPEN_STATES,
    STATE_WORDS,
    TRANSITIONS,
    WITH_REVIEWER,
    Action,
    Actor,
    State,
    actor_for,
    next_state,
)
from tests import builders
from tests.cast import make_person

PEOPLE = ("analyst", "contributing_reviewer", "taker", "other_reviewer", "qa_manager", "method_owner", "outsider")
CAN_ACT_AS = {
    "analyst": {Actor.ANALYST},
    "contributing_reviewer": {Actor.ANALYST},
    "taker": {Actor.REVIEWER, Actor.TAKER},
    "other_reviewer": {Actor.REVIEWER},
    "qa_manager": {Actor.QA_MANAGER},
    "method_owner": set(),
    "outsider": set(),
}
ROLES = {
    "analyst": {"analyst"},
    "contributing_reviewer": {"analyst", "reviewer"},
    "taker": {"reviewer"},
    "other_reviewer": {"reviewer"},
    "qa_manager": {"qa_manager"},
    "method_owner": {"method_owner"},
    "outsider": set(),
}
ROLE_FOR = {Actor.ANALYST: "analyst", Actor.QA_MANAGER: "qa_manager"}


def test_every_state_is_open_or_decided_and_has_words():
    assert set(OPEN_STATES) | set(DECIDED_STATES) == set(State) and not set(OPEN_STATES) & set(DECIDED_STATES)
    assert set(STATE_WORDS) == set(State) and set(WITH_REVIEWER) <= set(OPEN_STATES)


def test_every_action_is_possible_somewhere_and_every_state_is_reached():
    assert {action for _, action in TRANSITIONS} == set(Action)
    assert {state for state, _ in TRANSITIONS.values()} | {State.DRAFT} == set(State)


def test_nothing_leads_back_from_an_end():
    for (state, _), (after, _) in TRANSITIONS.items():
        if state in DECIDED_STATES:
            assert after in DECIDED_STATES
        assert after is not State.DRAFT or state is State.DRAFT


def test_an_interpretation_is_decided_by_a_reviewer_who_took_it_alone():
    for (state, _), (after, actor) in TRANSITIONS.items():
        if after in (State.APPROVED, State.REJECTED) and state is not after:
            assert actor is Actor.TAKER and state is State.IN_REVIEW


def test_what_is_not_in_the_table_leads_nowhere():
    for state, action in product(State, Action):
        known = (state, action) in TRANSITIONS
        assert (next_state(state, action) is not None) == known == (actor_for(state, action) is not None)


@dataclass
class Unsaved:
    version: InterpretationVersion
    people: dict


@pytest.fixture(scope="module")
def counted():
    """How many combinations were judged; asserted at the end so that the loop below cannot run empty."""
    return []


@pytest.fixture
def scene(cast, lab, quick_computing):
    version = builders.drafted_version(cast, lab)
    people = {name: make_person(f"{name}_x", roles=tuple(sorted(ROLES[name]))) for name in PEOPLE}
    builders.upload(
        version.interpretation.examination,
        people["contributing_reviewer"],
        data=builders.jcamp_file(seed=8),
    )
    version.taken_by = people["taker"]
    return Unsaved(version, people)


@pytest.mark.parametrize("state", list(State))
def test_every_action_by_every_person_is_allowed_or_refused_with_the_right_status(scene, state):
    scene.version.state = state
    judged = 0
    for action, name in product(Action, PEOPLE):
        user, actor = scene.people[name], actor_for(state, action)
        allowed = actor is not None and actor in CAN_ACT_AS[name]
        if actor is None:
            needed = next((ROLE_FOR.get(a, "reviewer") for (_, act), (_, a) in TRANSITIONS.items() if act is action))
            expected = 409 if needed in ROLES[name] else 403
        else:
            expected = None if allowed else 403
        try:
            after = permissions.require(user, scene.version, action)
        except (NotAllowed, NotPossible) as refused:
            assert refused.status == expected, (state, action, name, refused.code)
            assert refused.code and refused.message
        else:
            assert expected is None and after == next_state(state, action), (state, action, name)
        assert permissions.may(user, scene.version, action) is allowed
        judged += 1
    assert judged == len(Action) * len(PEOPLE) == 98


def test_the_reviewer_who_disagrees_does_not_answer(scene):
    scene.version.state = State.IN_REVIEW
    both = make_person("both", roles=("analyst", "reviewer"))
    scene.version.taken_by = both
    with pytest.raises(NotAllowed) as refused:
        permissions.require(both, scene.version, Action.ANSWER)
    assert refused.value.code == "point.own_disagreement"
