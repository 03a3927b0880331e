"""A service in which recording fails changes nothing at all, whichever service it is."""

from __future__ import annotations

import importlib

import pytest
from django.apps import apps

from reviews.models import InterpretationVersion
from reviews.services import drafts, reviewing
from spectra.services import analyses, approvals, instruments, master, receiving, uploads
from spectra.services.uploads import MeasurementFacts
from tests import builders

MODULES = (
    "spectra.services.analyses",
    "spectra.services.approvals",
    "spectra.services.instruments",
    "spectra.services.master",
    "spectra.services.receiving",
    "spectra.services.uploads",
    "reviews.services.drafts",
    "reviews.services.reviewing",
)
# An attempt is counted before its work begins, and a proof is earned by a password of its own.
APART = {"spectra.Analysis.attempt"}


class RecordFailed(Exception):
    pass


@pytest.fixture
def record_fails(monkeypatch):
    def begin():
        def fail(*args, **kwargs):
            raise RecordFailed

        for name in MODULES:
            monkeypatch.setattr(importlib.import_module(name), "record", fail)

    return begin


def snapshot() -> dict[str, list]:
    """Every row of both layers, the trail and the signatures."""
    models = [
        m for label in ("spectra", "reviews", "trail", "signing") for m in apps.get_app_config(label).get_models()
    ]
    return {
        model._meta.label: list(model.objects.order_by("pk").values()) for model in models if model.__name__ != "Proof"
    }


def unchanged(before: dict[str, list], record_fails, act) -> None:
    record_fails()
    with pytest.raises(RecordFailed):
        act()
    assert snapshot() == before


def a_draft(cast, lab):
    version = builders.drafted_version(cast, lab)
    claim = version.claims.get(key="group:ester")
    added = drafts.add_claim(
        version_id=version.pk, by=cast.analyst, kind="impurity", title="Water", verdict="found", reason="1640"
    )
    who = {"version_id": version.pk, "by": cast.analyst}
    return {
        "confirm": lambda: drafts.confirm_claim(claim_id=claim.pk, **who),
        "confirm_uneventful": lambda: drafts.confirm_uneventful(**who),
        "change": lambda: drafts.change_claim(claim_id=claim.pk, verdict="undecided", reason="r", edits=None, **who),
        "add": lambda: drafts.add_claim(kind="impurity", title="Acid", verdict="found", reason="r", **who),
        "remove": lambda: drafts.remove_claim(claim_id=added.pk, reason="r", **who),
        "conclude": lambda: builders.conclude(version, cast.analyst),
    }


@pytest.mark.parametrize("name", ["confirm", "confirm_uneventful", "change", "add", "remove", "conclude"])
def test_a_draft_stays_as_it_was(cast, lab, quick_computing, record_fails, name):
    act = a_draft(cast, lab)[name]
    unchanged(snapshot(), record_fails, act)


def test_a_submission_leaves_no_trace(cast, lab, quick_computing, record_fails):
    version = builders.drafted_version(cast, lab)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    shown, proof = builders.hash_to_sign(version), builders.proof_of(cast.analyst)
    unchanged(
        snapshot(),
        record_fails,
        lambda: drafts.submit(version_id=version.pk, by=cast.analyst, proof=proof, content_hash=shown),
    )


@pytest.mark.parametrize("name", ["hand_back", "open", "judge", "approve", "reject", "overdue"])
def test_a_review_stays_as_it_was(cast, lab, quick_computing, record_fails, settings, name):
    version = builders.taken_version(cast, lab)
    if name != "open":
        builders.see_everything(version, cast.reviewer)
    point, proof = version.points.first(), builders.proof_of(cast.reviewer)
    who = {"version_id": version.pk, "by": cast.reviewer}
    signed = {"proof": proof, "content_hash": version.content_hash}
    if name == "overdue":
        settings.REVIEW_HOURS = -1
    acts = {
        "hand_back": lambda: reviewing.hand_back(**who),
        "open": lambda: reviewing.open_point(point_id=point.pk, **who),
        "judge": lambda: reviewing.judge_point(point_id=point.pk, judgement="disagree", comment="c", **who),
        "approve": lambda: reviewing.approve(**who, **signed),
        "reject": lambda: reviewing.reject(reasons=[{"text": "no"}], **who, **signed),
        "overdue": reviewing.return_overdue,
    }
    unchanged(snapshot(), record_fails, acts[name])


def test_a_taking_leaves_no_trace(cast, lab, quick_computing, record_fails):
    version = builders.submitted_version(cast, lab)
    unchanged(snapshot(), record_fails, lambda: reviewing.take(version_id=version.pk, by=cast.reviewer))


def test_a_revision_and_a_withdrawal_leave_no_trace(cast, lab, quick_computing, record_fails):
    version = builders.approved_version(cast, lab)
    proof, before = builders.proof_of(cast.qa_manager), snapshot()
    unchanged(before, record_fails, lambda: drafts.revise(version_id=version.pk, by=cast.analyst, reason="r"))
    unchanged(
        before,
        record_fails,
        lambda: reviewing.withdraw(
            version_id=version.pk, by=cast.qa_manager, proof=proof, content_hash=version.content_hash, reason="r"
        ),
    )
    assert InterpretationVersion.objects.get().state == "approved"


def test_master_data_stays_as_it_was(cast, lab, record_fails):
    draft = builders.draft_material(cast, code="NEW")
    proof, shown = builders.proof_of(cast.qa_manager), approvals.content_hash_of(type(draft).objects.get(pk=draft.pk))
    before = snapshot()
    text = builders.TABLE_FILE.read_text(encoding="utf-8")
    for act in (
        lambda: builders.draft_material(cast, code="OTHER"),
        lambda: master.change_material(pk=draft.pk, by=cast.method_owner, values={"formula": "x"}),
        lambda: builders.draft_procedure(cast, lab.method),
        lambda: master.draft_method(by=cast.method_owner, name="n"),
        lambda: master.load_group_table(by=cast.method_owner, text=text),
        lambda: builders.register_reference(cast, lab.material, code="R-9", seed=44),
        lambda: master.draft_watch_list(by=cast.method_owner, code="W", title="t", items=[("x", lab.reference.pk)]),
        lambda: master.retire_material(pk=lab.material.pk, by=cast.qa_manager, reason="r"),
        lambda: approvals.approve(kind="material", pk=draft.pk, by=cast.qa_manager, proof=proof, content_hash=shown),
        lambda: instruments.register_instrument(by=cast.method_owner, code="FT-2", name="n"),
    ):
        unchanged(before, record_fails, act)


def test_receiving_and_uploading_leave_no_trace(cast, lab, record_fails):
    row = builders.examination(cast, lab)
    waiting = builders.upload(row, cast.analyst, data=builders.table_file())
    spectrum = builders.upload(row, cast.analyst).spectra.get()
    before = snapshot()
    for act in (
        lambda: builders.delivery(cast, lab, lot="L-9"),
        lambda: builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=7)),
        lambda: builders.upload(row, cast.analyst, data=b"nothing"),
        lambda: uploads.answer_upload(
            upload_id=waiting.pk, by=cast.analyst, answers={"ordinate": "absorbance"}, facts=MeasurementFacts()
        ),
        lambda: uploads.change_role(spectrum_id=spectrum.pk, by=cast.analyst, role="excluded", reason="r"),
    ):
        unchanged(before, record_fails, act)


def test_an_analysis_that_cannot_be_recorded_is_not_done(cast, lab, quick_computing, record_fails, rung):
    analysis = builders.waiting_analysis(cast, lab)
    attempt = analyses._claim(analysis.pk)
    before, outcome = snapshot(), builders.fake_outcome()
    unchanged(before, record_fails, lambda: analyses._finish(analysis.pk, attempt, outcome))
    unchanged(before, record_fails, lambda: analyses._fail(analysis.pk, attempt, code="c", text="t"))
    unchanged(before, record_fails, lambda: analyses._take_over(analysis.pk, attempt, 1))


def test_every_module_of_services_is_looked_at():
    from pathlib import Path

    from django.conf import settings

    found = {
        f"{app}.services.{path.stem}"
        for app in ("spectra", "reviews")
        for path in (Path(settings.BASE_DIR) / app / "services").glob("*.py")
        if "import record" in path.read_text(encoding="utf-8")
    }
    assert found == set(MODULES)
    assert receiving.record
