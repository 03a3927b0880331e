"""Who may act on an interpretation. The same predicates show the button, decide in the service, stand in the tests."""

from __future__ import annotations

from labsite.accounts.models import Role, User
from labsite.errors import NotAllowed, NotPossible
from reviews.models import InterpretationVersion
from reviews.transitions import Action, Actor, State, actor_for, next_state


def is_contributor(user: User, version: InterpretationVersion) -> bool:
    """Whether the examination is the own work of `user`: prepared, measured, uploaded, edited, claimed or concluded."""
    return version.interpretation.examination.contributions.filter(user=user).exists()


def may(user: User, version: InterpretationVersion, action: Action) -> bool:
    try:
        require(user, version, action)
    except (NotAllowed, NotPossible):
        return False
    return True


def require(user: User, version: InterpretationVersion, action: Action) -> State:
    """The state that the action leads to. Raises NotAllowed for the wrong person, NotPossible in the wrong state."""
    actor = actor_for(State(version.state), action)
    if actor is None:
        _require_role_for(user, action)
        raise NotPossible(
            f"interpretation.not_{action}",
            f"This version is {version.get_state_display()}, so that cannot be done now.",
            remedy="Open it again to see where it stands.",
            state=version.state,
        )
    if actor is Actor.ANALYST and not user.has_role(Role.ANALYST):
        raise NotAllowed("interpretation.not_an_analyst", "Only an analyst can do that.")
    if action is Action.ANSWER and version.taken_by_id == user.pk:
        raise NotAllowed("point.own_disagreement", "The analyst answers, not the reviewer who disagrees.")
    if actor is Actor.QA_MANAGER and not user.has_role(Role.QA_MANAGER):
        raise NotAllowed("interpretation.not_qa", "Only a QA manager can do that.")
    if actor in (Actor.REVIEWER, Actor.TAKER):
        _require_reviewer(user, version)
    if actor is Actor.TAKER and version.taken_by_id != user.pk:
        raise NotAllowed(
            "interpretation.taken_by_another",
            "Another reviewer has taken this proposal.",
            remedy="It can be taken once that reviewer hands it back, or when the time for it is up.",
        )
    if actor is Actor.SYSTEM:
        raise NotAllowed("interpretation.by_itself", "That happens by itself and cannot be asked for.")
    return next_state(State(version.state), action)


ROLE_FOR_ACTION = {
    Action.EDIT: Role.ANALYST,
    Action.SUBMIT: Role.ANALYST,
    Action.ANSWER: Role.ANALYST,
    Action.REVISE: Role.ANALYST,
    Action.WITHDRAW: Role.QA_MANAGER,
}


def _require_role_for(user: User, action: Action) -> None:
    """Somebody who could never do it is told so, rather than that it is too late."""
    role = ROLE_FOR_ACTION.get(action, Role.REVIEWER)
    if not user.has_role(role):
        raise NotAllowed("interpretation.wrong_role", f"Only somebody with the role {role.label} can do that.")


def _require_reviewer(user: User, version: InterpretationVersion) -> None:
    if not user.has_role(Role.REVIEWER):
        raise NotAllowed("interpretation.not_a_reviewer", "Only a reviewer can do that.")
    if is_contributor(user, version):
        raise NotAllowed(
            "interpretation.own_work",
            "You had a hand in this examination, so somebody else has to review it.",
            remedy="Ask another reviewer. Preparing, measuring, uploading, excluding and stating claims all count.",
        )
