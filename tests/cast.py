"""The people of every test, one for each role, and the small things that tests need from them."""

from __future__ import annotations

from dataclasses import dataclass

from django.test import Client, RequestFactory

from labsite.accounts import sessions
from labsite.accounts.models import Role, User
from labsite.accounts.services import create_user_with_password

PASSWORD = "grey heron over slow water"
WRONG_PASSWORD = "brown heron over slow water"

MEMBERS: dict[str, tuple[str, tuple[str, ...]]] = {
    "analyst": ("Analyst", (Role.ANALYST,)),
    "second_analyst": ("Second analyst", (Role.ANALYST,)),
    "reviewer": ("Reviewer", (Role.REVIEWER,)),
    "qa_manager": ("QA manager", (Role.QA_MANAGER,)),
    "method_owner": ("Method owner", (Role.METHOD_OWNER,)),
    "administrator": ("Lab administrator", (Role.LAB_ADMINISTRATOR,)),
    "outsider": ("Outsider", ()),
}


@dataclass(frozen=True)
class Cast:
    """Everybody. `outsider` has an account and no role."""

    analyst: User
    second_analyst: User
    reviewer: User
    qa_manager: User
    method_owner: User
    administrator: User
    outsider: User

    def __getitem__(self, name: str) -> User:
        return getattr(self, name)


def make_cast() -> Cast:
    return Cast(**{name: make_person(name, printed_name, roles) for name, (printed_name, roles) in MEMBERS.items()})


def make_person(username: str, printed_name: str = "", roles: tuple[str, ...] = ()) -> User:
    user = create_user_with_password(
        username=username, printed_name=printed_name or username.capitalize(), password=PASSWORD, roles=roles
    )
    user.forget_roles()
    return user


def sign_in(client: Client, person: User) -> Client:
    """Put `person` into the session of `client` without the page and without a trail entry."""
    client.force_login(person)
    session = client.session
    holder = RequestFactory().get("/")
    holder.session = session
    sessions.start(holder, person)
    session.save()
    return client


def signed_in(person: User) -> Client:
    return sign_in(Client(), person)


def request_of(person: User, path: str = "/", data: dict | None = None):
    """A POST request made by `person`, for services that authenticate with the request."""
    request = RequestFactory().post(path, data or {})
    request.user = person
    return request
