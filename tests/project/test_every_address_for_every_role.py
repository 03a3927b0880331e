"""Every address of the application, asked by every role, a person without one, and a visitor who is not signed in.

The table is complete in both directions: an address that it does not list fails, and so does a line whose address is
gone. Each question is asked in the same laboratory, and what it changed is rolled back.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from html.parser import HTMLParser

import pytest
from django.db import connection
from django.http import HttpResponse
from django.urls import URLPattern, URLResolver, get_resolver, reverse
from django.utils.html import escape

from labsite import policy
from reviews.models import InterpretationVersion
from tests.cast import PASSWORD
from tests.project.world import HOSTILE, INSIDERS, PEOPLE, World, build_world, rolled_back

METHODS = ("GET", "POST", "PUT", "PATCH", "DELETE")
pytestmark = pytest.mark.django_db  # the databases are made; the laboratory below lives longer than one test


@dataclass(frozen=True)
class Line:
    """One question: an address, what is sent, and the status that each of PEOPLE gets."""

    name: str
    method: str
    statuses: str
    note: str = ""
    kwargs: dict[str, str] = field(default_factory=dict)  # argument of the address -> name in World.id
    data: Callable[[World], dict] = dict

    @property
    def test_id(self) -> str:
        return f"{self.method} {self.name}" + (f" ({self.note})" if self.note else "")


def get(name: str, statuses: str, note: str = "", **kwargs: str) -> Line:
    return Line(name, "GET", statuses, note, kwargs)


def post(name: str, statuses: str, note: str = "", data: Callable[[World], dict] = lambda world: {}, **kwargs: str):
    return Line(name, "POST", statuses, note, kwargs, data)


def reason(world: World) -> dict:
    return {"reason": "as agreed"}


def signature(prefix: str = "", of: str = "", **more: str) -> Callable[[World], dict]:
    """A right password for the content that stands there; `of` names the version in World.id."""
    lead = f"{prefix}-" if prefix else ""
    return lambda world: {f"{lead}password": PASSWORD, f"{lead}content_hash": getattr(world.id, of), **more}


def delivery_data(world: World) -> dict:
    return {
        "material": world.lab.material.pk,
        "supplier": "Supplier North",
        "lot": "L-9",
        "received_on": "2026-03-02",
        "priority": "2",
        "containers_total": "1",
        "sampled_containers": "1",
    }


#                                     visitor outsider analyst reviewer qa owner administrator
LINES: tuple[Line, ...] = (
    # The way in, and everybody's own pages
    get("home", "302 302 302 302 302 302 302"),
    get("health", "200 200 200 200 200 200 200"),
    get("accounts:sign_in", "200 302 302 302 302 302 302"),
    post("accounts:sign_in", "422 302 302 302 302 302 302", "nothing typed"),
    post("accounts:sign_out", "302 302 302 302 302 302 302"),
    get("accounts:profile", "302 200 200 200 200 200 200"),
    get("accounts:change_password", "302 200 200 200 200 200 200"),
    post("accounts:change_password", "302 422 422 422 422 422 422", "nothing typed"),
    get("reviews:today", "302 404 200 200 200 200 200"),
    # Accounts
    get("accounts:people", "302 404 403 403 403 403 200"),
    get("accounts:new_person", "302 404 403 403 403 403 200"),
    post(
        "accounts:new_person",
        "302 404 403 403 403 403 200",
        "",
        lambda world: {"username": "newcomer", "printed_name": "Newcomer", "roles": ["analyst"]},
    ),
    get("accounts:small_laboratory", "302 404 403 403 200 403 200"),
    post("accounts:small_laboratory", "302 404 403 403 302 403 403", "", reason),
    get("accounts:person", "302 404 403 403 403 403 200", user_id="second_analyst"),
    post(
        "accounts:grant_role",
        "302 404 403 403 403 403 302",
        "",
        lambda world: {"role": "reviewer", "reason": "as agreed"},
        user_id="second_analyst",
    ),
    post(
        "accounts:revoke_role",
        "302 404 403 403 403 403 302",
        "",
        lambda world: {"role": "analyst", "reason": "as agreed"},
        user_id="second_analyst",
    ),
    post("accounts:deactivate", "302 404 403 403 403 403 302", "", reason, user_id="second_analyst"),
    post("accounts:reactivate", "302 404 403 403 403 403 302", "", reason, user_id="former"),
    post("accounts:reset_password", "302 404 403 403 403 403 200", "", reason, user_id="second_analyst"),
    # Trail
    get("trail:search", "302 404 200 200 200 200 200"),
    get("trail:entry", "302 404 200 200 200 200 200", seq="entry"),
    get("trail:record", "302 404 200 200 200 200 200", kind="delivery_kind", subject_id="delivery"),
    get("trail:verify", "302 404 403 403 200 403 403"),
    post("trail:verify", "302 404 403 403 302 403 403"),
    post("trail:export", "302 404 403 403 200 403 403", "CSV", lambda world: {"format": "csv"}),
    post("trail:export", "302 404 403 403 200 403 403", "JSON", lambda world: {"format": "json"}),
    # Master data
    get("spectra:shelf", "302 404 200 200 200 200 403"),
    get("spectra:reference", "302 404 200 200 200 200 403", pk="reference"),
    get("spectra:raw_file", "302 404 200 200 200 200 403", sha256="raw"),
    get("spectra:new_reference", "302 404 403 403 403 200 403"),
    post("spectra:new_reference", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:materials", "302 404 200 200 200 200 403"),
    get("spectra:material", "302 404 200 200 200 200 403", pk="material"),
    get("spectra:structure", "302 404 403 403 403 200 403"),
    get("spectra:new_material", "302 404 403 403 403 200 403"),
    post("spectra:new_material", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:change_material", "302 404 403 403 403 200 403", pk="draft_material"),
    post("spectra:change_material", "302 404 403 403 403 422 403", "nothing typed", pk="draft_material"),
    get("spectra:new_material_version", "302 404 403 403 403 200 403", pk="material"),
    post("spectra:new_material_version", "302 404 403 403 403 422 403", "nothing typed", pk="material"),
    post("spectra:retire_material", "302 404 403 403 302 302 403", "", reason, pk="material"),
    get("spectra:watch_lists", "302 404 200 200 200 200 403"),
    get("spectra:watch_list", "302 404 200 200 200 200 403", pk="watch_list"),
    get("spectra:new_watch_list", "302 404 403 403 403 200 403"),
    post("spectra:new_watch_list", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:new_watch_list_version", "302 404 403 403 403 200 403", pk="watch_list"),
    post("spectra:new_watch_list_version", "302 404 403 403 403 422 403", "nothing typed", pk="watch_list"),
    get("spectra:procedures", "302 404 200 200 200 200 403"),
    get("spectra:procedure", "302 404 200 200 200 200 403", pk="procedure"),
    get("spectra:new_procedure", "302 404 403 403 403 200 403"),
    post("spectra:new_procedure", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:new_edition", "302 404 403 403 403 200 403", pk="procedure"),
    post("spectra:new_edition", "302 404 403 403 403 422 403", "nothing typed", pk="procedure"),
    get("spectra:methods", "302 404 200 200 200 200 403"),
    get("spectra:method", "302 404 200 200 200 200 403", pk="method"),
    get("spectra:new_method", "302 404 403 403 403 200 403"),
    post("spectra:new_method", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:new_method_version", "302 404 403 403 403 200 403", pk="method"),
    post("spectra:new_method_version", "302 404 403 403 403 422 403", "nothing typed", pk="method"),
    post("spectra:load_method", "302 404 403 403 403 409 403", "there already"),
    get("spectra:group_tables", "302 404 200 200 200 200 403"),
    get("spectra:group_table", "302 404 200 200 200 200 403", pk="group_table"),
    get("spectra:new_group_table", "302 404 403 403 403 200 403"),
    post("spectra:new_group_table", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:new_group_table_version", "302 404 403 403 403 200 403", pk="group_table"),
    post("spectra:new_group_table_version", "302 404 403 403 403 422 403", "nothing typed", pk="group_table"),
    post("spectra:load_group_table", "302 404 403 403 403 409 403", "there already"),
    get("spectra:instruments", "302 404 200 200 200 200 403"),
    get("spectra:instrument", "302 404 200 200 200 200 403", pk="instrument"),
    get("spectra:new_instrument", "302 404 403 403 403 200 403"),
    post("spectra:new_instrument", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:new_qualification", "302 404 403 403 403 200 403", pk="instrument"),
    post("spectra:new_qualification", "302 404 403 403 403 422 403", "nothing typed", pk="instrument"),
    get("spectra:new_check", "302 404 200 403 403 200 403", pk="accessory"),
    post("spectra:new_check", "302 404 422 403 403 422 403", "nothing typed", pk="accessory"),
    get("spectra:approve", "302 404 403 403 200 200 403", kind="material_kind", pk="draft_material"),
    post(
        "spectra:approve",
        "302 404 403 403 302 403 403",
        "the owner wrote it",
        signature(of="draft_material_hash"),
        kind="material_kind",
        pk="draft_material",
    ),
    # Deliveries, samples, files
    get("reviews:samples", "302 404 200 200 200 200 403"),
    get("reviews:sample", "302 404 200 200 200 200 403", pk="sample"),
    get("reviews:delivery", "302 404 200 200 200 200 403", pk="delivery"),
    get("reviews:register_delivery", "302 404 200 403 403 403 403"),
    post("reviews:register_delivery", "302 404 302 403 403 403 403", "", delivery_data),
    post("reviews:register_delivery", "302 404 422 403 403 403 403", "nothing typed"),
    post("reviews:upload", "302 404 422 403 403 403 403", "no file", pk="examination"),
    post(
        "reviews:answer_upload",
        "302 404 302 403 403 403 403",
        "",
        lambda world: {"x_unit": "cm-1", "ordinate": "absorbance"},
        pk="asking_upload",
    ),
    get("reviews:spectrum_row", "302 404 200 200 200 200 403", pk="draft_spectrum"),
    post(
        "reviews:change_role",
        "302 404 302 403 403 403 403",
        "",
        lambda world: {"role": "excluded", "reason": "a wet cell"},
        pk="draft_spectrum",
    ),
    post("reviews:retry", "302 404 302 403 403 403 403", pk="failed_analysis"),
    post("reviews:retry", "302 404 409 403 403 403 403", "did not fail", pk="draft_analysis"),
    # Bench
    get("reviews:bench", "302 404 200 200 200 200 403", "draft", pk="draft_spectrum"),
    get("reviews:bench", "302 404 200 200 200 200 403", "not analysed", pk="waiting_spectrum"),
    get("reviews:bench", "302 404 200 200 200 200 403", "approved", pk="approved_spectrum"),
    get("reviews:analysis_progress", "302 404 200 200 200 200 403", pk="waiting_spectrum"),
    get("reviews:plot", "302 404 200 200 200 200 403", pk="draft_analysis"),
    get("reviews:plot", "302 404 409 409 409 409 403", "not analysed", pk="waiting_analysis"),
    get("reviews:version", "302 404 302 302 302 302 403", pk="draft"),
    post(
        "reviews:add_claim",
        "302 404 302 403 403 403 403",
        "",
        lambda world: {"kind": "quality", "verdict": "quality:usable", "title": "Thin film", "reason": "as asked"},
        pk="draft",
    ),
    post("reviews:add_claim", "302 404 422 403 403 403 403", "nothing typed", pk="draft"),
    post("reviews:confirm_uneventful", "302 404 302 403 403 403 403", pk="draft"),
    post("reviews:confirm_claim", "302 404 302 403 403 403 403", pk="draft", claim_pk="draft_claim"),
    post("reviews:confirm_claim", "302 404 409 403 403 403 403", "signed", pk="submitted", claim_pk="submitted_claim"),
    post(
        "reviews:change_claim",
        "302 404 302 403 403 403 403",
        "",
        lambda world: {"verdict": world.id.changed_verdict, "reason": "seen otherwise"},
        pk="draft",
        claim_pk="draft_claim",
    ),
    post("reviews:change_claim", "302 404 422 403 403 403 403", "no reason", pk="draft", claim_pk="draft_claim"),
    post("reviews:remove_claim", "302 404 409 403 403 403 403", "computed", pk="draft", claim_pk="draft_claim"),
    post(
        "reviews:write_conclusion",
        "302 404 302 403 403 403 403",
        "",
        lambda world: {"value": "complies", "text": ""},
        pk="draft",
    ),
    post("reviews:write_conclusion", "302 404 422 403 403 403 403", "nothing typed", pk="draft"),
    get("reviews:submit", "302 404 200 403 403 403 403", pk="ready"),
    post("reviews:submit", "302 404 302 403 403 403 403", "", signature(of="ready_hash"), pk="ready"),
    post("reviews:submit", "302 404 422 403 403 403 403", "nothing typed", pk="ready"),
    # Review
    get("reviews:review", "302 404 200 200 200 200 403", pk="taken"),
    get("reviews:review", "302 404 302 302 302 302 403", "draft", pk="draft"),
    post("reviews:take", "302 404 403 302 403 403 403", pk="submitted"),
    post("reviews:take", "302 404 403 409 403 403 403", "decided", pk="approved"),
    post("reviews:hand_back", "302 404 403 302 403 403 403", pk="taken"),
    post("reviews:open_point", "302 404 403 302 403 403 403", pk="taken", point_pk="taken_point"),
    post(
        "reviews:judge_point",
        "302 404 403 302 403 403 403",
        "",
        lambda world: {"judgement": "agree", "note": "seen"},
        pk="taken",
        point_pk="opened_point",
    ),
    post(
        "reviews:answer_point",
        "302 404 302 403 403 403 403",
        "",
        lambda world: {"answer": "measured again"},
        pk="disputed",
        point_pk="disputed_point",
    ),
    post(
        "reviews:settle_point",
        "302 404 403 302 403 403 403",
        "",
        lambda world: {"settlement": "agreed now"},
        pk="answered",
        point_pk="answered_point",
    ),
    post("reviews:approve", "302 404 403 302 403 403 403", "", signature("approve", "seen_hash"), pk="seen"),
    post(
        "reviews:approve", "302 404 403 409 403 403 403", "another hash", signature("approve", "taken_hash"), pk="seen"
    ),
    post("reviews:approve", "302 404 403 409 403 403 403", "unread", signature("approve", "taken_hash"), pk="taken"),
    post(
        "reviews:reject",
        "302 404 403 302 403 403 403",
        "",
        signature("reject", "taken_hash", general="measure again"),
        pk="taken",
    ),
    post("reviews:reject", "302 404 403 422 403 403 403", "no reason", signature("reject", "taken_hash"), pk="taken"),
    post(
        "reviews:withdraw",
        "302 404 403 403 302 403 403",
        "",
        signature("withdraw", "approved_hash", reason="the lot was mixed up"),
        pk="approved",
    ),
    post("reviews:revise", "302 404 302 403 403 403 403", "rejected", pk="rejected"),
)


@pytest.fixture(scope="module")
def world(django_db_setup, django_db_blocker) -> Iterator[World]:
    with django_db_blocker.unblock(), rolled_back():
        yield build_world()


def address(world: World, line: Line) -> str:
    return reverse(line.name, kwargs={name: getattr(world.id, key) for name, key in line.kwargs.items()})


def ask(world: World, person: str, line: Line, url: str = "") -> HttpResponse:
    client, url = world.as_person(person), url or address(world, line)
    return client.get(url) if line.method == "GET" else client.post(url, line.data(world))


# What each answer must keep


class Inline(HTMLParser):
    """Finds what the content security policy would refuse, and whatever would be fetched from outside."""

    FETCHING = {"src", "href", "action", "formaction", "poster", "data", "hx-get", "hx-post"}

    def __init__(self) -> None:
        super().__init__()
        self.wrong: list[str] = []

    def handle_starttag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        given = dict(attributes)
        if tag == "style" or (tag == "script" and not given.get("src")):
            self.wrong.append(f"inline <{tag}>")
        for name, value in attributes:
            if name == "style" or name.startswith(("on", "hx-on")):
                self.wrong.append(f"{name} on <{tag}>")
            if name in self.FETCHING and re.match(r"\s*(?:[a-z]+:|//)", value or "", re.IGNORECASE):
                self.wrong.append(f"{name}={value!r} on <{tag}>")


def wrong_with(response: HttpResponse) -> list[str]:
    """What is against the rules that hold for every answer."""
    wrong = []
    if response.status_code >= 500:
        wrong.append(f"status {response.status_code}")
    given = response.headers.get("Content-Security-Policy", "none")
    allowed = (policy.PLAIN, policy.WITH_PLOT) if getattr(response, "holds_plot", False) else (policy.PLAIN,)
    if given not in allowed:
        wrong.append(f"policy {given}")
    if response.headers.get("Content-Type", "").startswith("text/html"):
        page = Inline()
        page.feed(response.content.decode("utf-8"))
        wrong += page.wrong
    return wrong


# The tests


def all_names() -> list[str]:
    def walk(patterns: list, spaces: tuple[str, ...]) -> Iterator[str]:
        for pattern in patterns:
            if isinstance(pattern, URLResolver):
                yield from walk(pattern.url_patterns, spaces + ((pattern.namespace,) if pattern.namespace else ()))
            elif isinstance(pattern, URLPattern):
                assert pattern.name, f"{pattern.pattern} has no name"
                yield ":".join((*spaces, pattern.name))

    return list(walk(get_resolver().url_patterns, ()))


def test_every_address_stands_in_the_table_and_every_line_has_an_address():
    there, listed = set(all_names()), {line.name for line in LINES}
    assert not there - listed, f"addresses without a line: {sorted(there - listed)}"
    assert not listed - there, f"lines without an address: {sorted(listed - there)}"
    assert len({line.test_id for line in LINES}) == len(LINES)


def test_no_name_is_given_to_two_addresses():
    names = all_names()
    assert len(names) == len(set(names))


@pytest.mark.parametrize("line", LINES, ids=lambda line: line.test_id)
def test_each_role_gets_the_answer_that_the_table_says(world, line):
    expected = dict(zip(PEOPLE, map(int, line.statuses.split()), strict=True))
    found, wrong = {}, []
    for person in PEOPLE:
        with rolled_back():
            response = ask(world, person, line)
            found[person] = response.status_code
            wrong += [f"{person}: {what}" for what in wrong_with(response)]
            if response.streaming:
                assert b"".join(response.streaming_content)
    assert found == expected
    assert not wrong


@pytest.mark.parametrize("name", sorted({line.name for line in LINES}))
def test_other_methods_are_refused_and_break_nothing(world, name):
    lines = [line for line in LINES if line.name == name]
    taken = {line.method for line in lines}
    for person in INSIDERS:
        for method in METHODS:
            if method in taken:
                continue
            with rolled_back():
                response = world.as_person(person).generic(method, address(world, lines[0]))
                assert response.status_code in (403, 405), f"{method} by {person}: {response.status_code}"
                assert not wrong_with(response)


@pytest.mark.parametrize("line", [line for line in LINES if line.method == "POST"], ids=lambda line: line.test_id)
def test_a_post_from_another_site_is_refused(world, line):
    """Without the token of the form nothing is done, whoever is signed in."""
    for person in INSIDERS:
        with rolled_back():
            response = world.as_person(person, checks_forms=True).post(address(world, line), line.data(world))
            assert response.status_code == 403, person
            assert not wrong_with(response)


@pytest.mark.parametrize(
    "line", {line.name: line for line in LINES if line.kwargs}.values(), ids=lambda line: line.test_id
)
def test_a_record_that_is_not_there_is_not_found(world, line):
    """Nowhere an error of ours, and no hint at what exists."""
    unknown = {"sha256": "0" * 64, "kind": "nothing", "subject_id": "nothing"}
    for number in (999_999_999, 2**63, 10**25):
        url = reverse(line.name, kwargs={name: unknown.get(name, number) for name in line.kwargs})
        for person in INSIDERS:
            with rolled_back():
                response = ask(world, person, line, url)
                assert response.status_code in (403, 404, 422), f"{number} by {person}: {response.status_code}"
                assert not wrong_with(response)


def test_an_address_that_does_not_exist_is_a_page_of_ours(world):
    for person in PEOPLE:
        with rolled_back():
            response = world.as_person(person).get("/no/such/page/")
            assert response.status_code == 404
            assert not wrong_with(response)
            assert b"There is no such page." in response.content


SIGNED_PAGES = [  # address, who signs there, how many signatures can be given
    ("reviews:submit", "ready", "analyst", 1),
    ("reviews:review", "seen", "reviewer", 2),
    ("reviews:review", "taken", "reviewer", 1),
    ("reviews:review", "approved", "qa_manager", 1),
]


@pytest.mark.parametrize(("name", "record", "person", "count"), SIGNED_PAGES)
def test_a_page_that_asks_for_a_signature_sends_the_hash_that_it_shows(world, name, record, person, count):
    with rolled_back():
        response = world.as_person(person).get(reverse(name, args=[getattr(world.id, record)]))
    sent = re.findall(r'name="(?:[a-z]+-)?content_hash" value="([0-9a-f]{64})"', response.content.decode("utf-8"))
    assert sent == [getattr(world.id, f"{record}_hash")] * count


def test_the_approval_of_master_data_sends_the_hash_that_it_shows(world):
    with rolled_back():
        url = reverse("spectra:approve", args=["material", world.id.draft_material])
        response = world.as_person("qa_manager").get(url)
    assert f'name="content_hash" value="{world.id.draft_material_hash}"' in response.content.decode("utf-8")


@pytest.mark.parametrize(
    "name", ["reviews:sample", "reviews:bench", "reviews:review", "trail:entry", "accounts:person", "spectra:material"]
)
def test_a_program_that_asks_for_json_gets_refusals_in_one_shape(world, name):
    line = next(line for line in LINES if line.name == name)
    with rolled_back():
        client = world.as_person("outsider")
        answer = client.get(address(world, line), headers={"accept": "application/json"})
    assert answer.status_code == 404
    assert set(answer.json()["error"]) == {"code", "message", "remedy", "params", "request"}


@pytest.mark.parametrize(("name", "key"), [("reviews:sample", "sample"), ("reviews:bench", "draft_spectrum")])
def test_text_from_a_form_or_file_is_shown_as_text(world, name, key):
    """The laboratory holds text that would be markup; every test above would have found it unescaped."""
    with rolled_back():
        page = world.as_person("analyst").get(reverse(name, args=[getattr(world.id, key)])).content.decode("utf-8")
    assert escape(HOSTILE) in page
    assert HOSTILE not in page


def test_the_database_was_left_as_it_was(world):
    """The questions above were asked of one laboratory: this is what lets them not disturb one another."""
    assert connection.in_atomic_block
    assert InterpretationVersion.objects.get(pk=world.id.submitted).state == "submitted"
    assert InterpretationVersion.objects.get(pk=world.id.taken).state == "in_review"
