"""Who may do what with deliveries, spectra and master data. Predicates that the pages ask and the services enforce."""

from __future__ import annotations

from labsite.accounts.models import Role, User
from labsite.errors import NotAllowed

READERS = (Role.ANALYST, Role.REVIEWER, Role.QA_MANAGER, Role.METHOD_OWNER)


def may_analyse(user: User) -> bool:
    return user.has_role(Role.ANALYST)


def may_own_methods(user: User) -> bool:
    return user.has_role(Role.METHOD_OWNER)


def may_approve_master_data(user: User) -> bool:
    """A second method owner or a QA manager; that it is not the author is judged at the record itself."""
    return user.has_role(Role.METHOD_OWNER, Role.QA_MANAGER)


def require_analyst(user: User) -> None:
    if not may_analyse(user):
        raise NotAllowed(
            "records.not_an_analyst",
            "Only an analyst can register samples, bring in spectra and interpret them.",
            remedy="Ask an analyst to do it, or a lab administrator for the role.",
        )


def require_method_owner(user: User) -> None:
    if not may_own_methods(user):
        raise NotAllowed(
            "records.not_a_method_owner",
            "Only a method owner can draft materials, procedures, references and tables.",
            remedy="Ask a method owner to do it.",
        )


def require_approver(user: User) -> None:
    if not may_approve_master_data(user):
        raise NotAllowed(
            "records.not_an_approver",
            "Only a method owner or a QA manager can approve master data, and never their own draft.",
            remedy="Ask another method owner or a QA manager.",
        )
