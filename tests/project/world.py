"""One laboratory with a record in every state that an address can meet, and clients that leave nothing behind."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from http.cookies import SimpleCookie
from types import SimpleNamespace

import pytest
from django.db import transaction
from django.test import Client

from labsite.accounts.models import Role, User
from labsite.accounts.services import deactivate
from reviews.services import drafts, reviewing
from spectra import computing
from spectra.core.errors import CoreError
from spectra.services import analyses, approvals, master
from tests import builders
from tests.builders import Laboratory
from tests.cast import Cast, make_cast, make_person, signed_in

PEOPLE = ("visitor", "outsider", "analyst", "reviewer", "qa_manager", "method_owner", "administrator")
HOSTILE = '"><img src=x onerror=run()><script>run()</script>'  # text that would be markup where it is not escaped
INSIDERS = ("manifold", "administrator")  # between them they may do everything


@dataclass(frozen=True)
class World:
    """One laboratory with one record in every state that an address can meet."""

    cast: Cast
    lab: Laboratory
    manifold: User  # analyst, reviewer, QA manager and method owner at once
    id: SimpleNamespace  # primary keys and hashes by name
    cookies: dict[str, SimpleCookie] = field(default_factory=dict)
    clients: dict[bool, Client] = field(default_factory=dict)

    def as_person(self, person: str, *, checks_forms: bool = False) -> Client:
        """A client for a request of `person`; `checks_forms` asks for the token of a form, as a server does.

        Clients and sessions are made once: making them takes longer than most questions.
        """
        if checks_forms not in self.clients:
            self.clients[checks_forms] = Client(raise_request_exception=False, enforce_csrf_checks=checks_forms)
        client = self.clients[checks_forms]
        client.cookies = SimpleCookie(self.cookies[person].output(header="", sep=";") if person != "visitor" else "")
        return client


@contextmanager
def rolled_back() -> Iterator[None]:
    """A transaction that leaves nothing behind; services may open their durable one inside it, as in any test."""
    block = transaction.atomic()
    block._from_testcase = True
    with block:
        yield
        transaction.set_rollback(True)


def build_world() -> World:
    cast = make_cast()
    manifold = make_person("manifold", "Manifold", (Role.ANALYST, Role.REVIEWER, Role.QA_MANAGER, Role.METHOD_OWNER))
    former = make_person("former", "Former analyst", (Role.ANALYST,))
    deactivate(by=cast.administrator, user_id=former.pk, reason="left")
    lab = builders.laboratory(cast)
    watched = builders.register_reference(cast, None, code="R-2", seed=91)
    builders.approved("reference", watched, cast)
    watch_list = master.draft_watch_list(
        by=cast.method_owner, code="W-1", title="Likely contaminants", items=[("Other ester", watched.pk)]
    )
    draft_material = builders.draft_material(cast, code="BAC", name="Butyl acetate", smiles="CCCCOC(C)=O")

    hostile = {"supplier": HOSTILE, "lot": HOSTILE, "form": HOSTILE}
    waiting = (
        builders.upload(
            builders.examination(cast, lab, **hostile), cast.analyst,
            data=builders.jcamp_file(title=HOSTILE, headers={"SAMPLE DESCRIPTION": HOSTILE}), file_name=f"{HOSTILE}.dx",
        )
        .spectra.get()
        .analyses.get()
    )  # fmt: skip
    asking = builders.upload(
        builders.examination(cast, lab, lot="L-2"), cast.analyst, data=builders.table_file(), file_name="table.txt"
    )
    failed = builders.waiting_analysis(cast, lab)
    draft = builders.drafted_version(cast, lab, **hostile)  # one real computation, for the plot
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(computing, "compute", lambda analysis, *, progress: refuse())
        analyses.execute(analysis_id=failed.pk)
        patch.setattr(computing, "compute", lambda analysis, *, progress: builders.fake_outcome())
        ready = builders.drafted_version(cast, lab, lot="L-4")
        builders.confirm_all(ready, cast.analyst)
        builders.conclude(ready, cast.analyst)
        submitted = builders.submitted_version(cast, lab, lot="L-5")
        taken = builders.taken_version(cast, lab, lot="L-6")
        seen = builders.taken_version(cast, lab, lot="L-7")
        builders.see_everything(seen, cast.reviewer)
        disputed = dispute(builders.taken_version(cast, lab, lot="L-8"), cast)
        answered = dispute(builders.taken_version(cast, lab, lot="L-9"), cast, answer="The film was thin.")
        approved = builders.approved_version(cast, lab, lot="L-10")
        rejected = builders.rejected_version(cast, lab, lot="L-11")
        drafts.write_conclusion(
            version_id=draft.pk, by=cast.analyst, conclusion="inconclusive", text=HOSTILE, edits=None
        )
    open_first(taken, cast)

    draft_claim = draft.claims.filter(kind="group", status="proposed").first()
    examination = draft.interpretation.examination
    points = list(taken.points.order_by("pk"))
    made = World(
        cast,
        lab,
        manifold,
        SimpleNamespace(
            second_analyst=cast.second_analyst.pk,
            former=former.pk,
            entry=1,
            delivery_kind="delivery",
            delivery=examination.delivery_id,
            sample=examination.samples.get().pk,
            examination=waiting.spectrum.examination_id,
            asking_upload=asking.pk,
            reference=lab.reference.pk,
            raw=draft.analysis.spectrum.upload.raw_file.sha256,
            material=lab.material.pk,
            material_kind="material",
            draft_material=draft_material.pk,
            draft_material_hash=approvals.content_hash_of(type(draft_material).objects.get(pk=draft_material.pk)),
            watch_list=watch_list.pk,
            procedure=lab.procedure.pk,
            method=lab.method.pk,
            group_table=lab.table.pk,
            instrument=lab.instrument.pk,
            accessory=lab.instrument.accessories.get().pk,
            waiting_analysis=waiting.pk,
            waiting_spectrum=waiting.spectrum_id,
            failed_analysis=failed.pk,
            draft=draft.pk,
            draft_analysis=draft.analysis_id,
            draft_spectrum=draft.analysis.spectrum_id,
            draft_claim=draft_claim.pk,
            changed_verdict="undecided" if draft_claim.verdict != "undecided" else "supported",
            ready=ready.pk,
            ready_hash=builders.hash_to_sign(ready),
            submitted=submitted.pk,
            submitted_claim=submitted.claims.first().pk,
            taken=taken.pk,
            taken_hash=taken.content_hash,
            opened_point=points[0].pk,
            taken_point=points[-1].pk,
            seen=seen.pk,
            seen_hash=seen.content_hash,
            disputed=disputed.pk,
            disputed_point=disputed.points.order_by("pk").first().pk,
            answered=answered.pk,
            answered_point=answered.points.order_by("pk").first().pk,
            approved=approved.pk,
            approved_hash=approved.content_hash,
            approved_spectrum=approved.analysis.spectrum_id,
            rejected=rejected.pk,
        ),
    )
    for person in (*PEOPLE[1:], *INSIDERS):
        made.cookies[person] = signed_in(manifold if person == "manifold" else cast[person]).cookies
    return made


def refuse() -> None:
    raise CoreError("spectrum.empty", "There is nothing to analyse.")


def open_first(version, cast):
    point = version.points.order_by("pk").first()
    reviewing.open_point(version_id=version.pk, point_id=point.pk, by=cast.reviewer)
    return point


def dispute(version, cast, *, answer: str = ""):
    """The reviewer disagrees about the first point, and the analyst answers where `answer` is given."""
    here = {"version_id": version.pk, "point_id": open_first(version, cast).pk}
    reviewing.judge_point(**here, by=cast.reviewer, judgement="disagree", comment=f"I see it otherwise. {HOSTILE}")
    if answer:
        reviewing.answer_disagreement(**here, by=cast.analyst, answer=answer)
    return version
