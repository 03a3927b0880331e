"""Every address of the application, asked by every role, a person without one, and a visitor who is not signed in.

The table is complete in both directions: an address that it does not list fails, and so does a line whose address is
gone. Each question is asked in the same laboratory, and what it changed is rolled back.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from html.parser import HTMLParser
from types import SimpleNamespace

import pytest
from django.db import connection, transaction
from django.http import HttpResponse
from django.test import Client
from django.urls import URLPattern, URLResolver, get_resolver, reverse

from labsite import policy
from tests.cast import PASSWORD, make_cast, signed_in

PEOPLE = ("visitor", "outsider", "analyst", "reviewer", "qa_manager", "method_owner", "administrator")
METHODS = ("GET", "POST", "PUT", "PATCH", "DELETE")
NOBODY = "302 404 404 404 404 404 404"
Kwargs = dict[str, Callable[["World"], object]]


@dataclass(frozen=True)
class World:
    """One laboratory with one record in every state that an address can meet."""

    cast: object
    lab: object
    id: SimpleNamespace  # primary keys and hashes by name


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
        "accounts:new_person", "302 404 403 403 403 403 200", "",
        lambda world: {"username": "newcomer", "printed_name": "Newcomer", "roles": ["analyst"]},
    ),
    get("accounts:small_laboratory", "302 404 403 403 200 403 200"),
    post("accounts:small_laboratory", "302 404 403 403 302 403 403", "", reason),
    get("accounts:person", "302 404 403 403 403 403 200", user_id="second_analyst"),
    post(
        "accounts:grant_role", "302 404 403 403 403 403 302", "",
        lambda world: {"role": "reviewer", "reason": "as agreed"}, user_id="second_analyst",
    ),
    post(
        "accounts:revoke_role", "302 404 403 403 403 403 302", "",
        lambda world: {"role": "analyst", "reason": "as agreed"}, user_id="second_analyst",
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
    post("spectra:load_method", "302 404 403 403 403 409 403", "loaded already"),
    get("spectra:group_tables", "302 404 200 200 200 200 403"),
    get("spectra:group_table", "302 404 200 200 200 200 403", pk="group_table"),
    get("spectra:new_group_table", "302 404 403 403 403 200 403"),
    post("spectra:new_group_table", "302 404 403 403 403 422 403", "nothing typed"),
    get("spectra:new_group_table_version", "302 404 403 403 403 200 403", pk="group_table"),
    post("spectra:new_group_table_version", "302 404 403 403 403 422 403", "nothing typed", pk="group_table"),
    post("spectra:load_group_table", "302 404 403 403 403 409 403", "loaded already"),
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
        "spectra:approve", "302 404 403 403 302 403 403", "the owner wrote it",
        signature(of="draft_material_hash"), kind="material_kind", pk="draft_material",
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
        "reviews:answer_upload", "302 404 302 403 403 403 403", "",
        lambda world: {"x_unit": "cm-1", "ordinate": "absorbance"}, pk="asking_upload",
    ),
    get("reviews:spectrum_row", "302 404 200 200 200 200 403", pk="draft_spectrum"),
    post(
        "reviews:change_role", "302 404 302 403 403 403 403", "",
        lambda world: {"role": "excluded", "reason": "a wet cell"}, pk="draft_spectrum",
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
        "reviews:add_claim", "302 404 302 403 403 403 403", "",
        lambda world: {"kind": "other", "verdict": world.id.other_verdict, "title": "A smell", "reason": "noticed"},
        pk="draft",
    ),
    post("reviews:add_claim", "302 404 422 403 403 403 403", "nothing typed", pk="draft"),
    post("reviews:confirm_uneventful", "302 404 302 403 403 403 403", pk="draft"),
    post("reviews:confirm_claim", "302 404 302 403 403 403 403", pk="draft", claim_pk="draft_claim"),
    post("reviews:confirm_claim", "302 404 409 403 403 403 403", "signed", pk="submitted", claim_pk="submitted_claim"),
    post(
        "reviews:change_claim", "302 404 302 403 403 403 403", "",
        lambda world: {"verdict": world.id.changed_verdict, "reason": "seen otherwise"},
        pk="draft", claim_pk="draft_claim",
    ),
    post("reviews:change_claim", "302 404 422 403 403 403 403", "no reason", pk="draft", claim_pk="draft_claim"),
    post("reviews:remove_claim", "302 404 409 403 403 403 403", "computed", pk="draft", claim_pk="draft_claim"),
    post(
        "reviews:write_conclusion", "302 404 302 403 403 403 403", "",
        lambda world: {"value": "complies", "text": ""}, pk="draft",
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
        "reviews:judge_point", "302 404 403 302 403 403 403", "",
        lambda world: {"judgement": "agree", "note": "seen"}, pk="taken", point_pk="opened_point",
    ),
    post(
        "reviews:answer_point", "302 404 302 403 403 403 403", "",
        lambda world: {"answer": "measured again"}, pk="disputed", point_pk="disputed_point",
    ),
    post(
        "reviews:settle_point", "302 404 403 302 403 403 403", "",
        lambda world: {"settlement": "agreed now"}, pk="answered", point_pk="answered_point",
    ),
    post("reviews:approve", "302 404 403 302 403 403 403", "", signature("approve", "seen_hash"), pk="seen"),
    post("reviews:approve", "302 404 403 409 403 403 403", "unread", signature("approve", "taken_hash"), pk="taken"),
    post(
        "reviews:reject", "302 404 403 302 403 403 403", "",
        signature("reject", "taken_hash", general="measure again"), pk="taken",
    ),
    post("reviews:reject", "302 404 403 422 403 403 403", "no reason", signature("reject", "taken_hash"), pk="taken"),
    post(
        "reviews:withdraw", "302 404 403 403 302 403 403", "",
        signature("withdraw", "approved_hash", reason="the lot was mixed up"), pk="approved",
    ),
    post("reviews:revise", "302 404 302 403 403 403 403", "rejected", pk="rejected"),
)
