"""Master data is drafted, changed and approved: by somebody else, over the content that was shown."""

from __future__ import annotations

from datetime import date

import pytest
from django.db import IntegrityError, transaction

from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible, Stale
from labsite.signing.models import Signature
from labsite.trail.models import TrailEntry
from spectra import selectors
from spectra.models import MaterialVersion, Procedure, Reference, WatchList
from spectra.services import approvals, master
from tests import builders
from tests.cast import make_person


def approve(kind, row, by, content_hash=None):
    return approvals.approve(
        kind=kind,
        pk=row.pk,
        by=by,
        proof=builders.proof_of(by),
        content_hash=content_hash or approvals.content_hash_of(type(row).objects.get(pk=row.pk)),
    )


def test_an_approval_is_signed_over_the_content(cast, lab):
    row = lab.material
    assert row.state == "approved" and row.approved_by == cast.qa_manager
    signature = Signature.objects.get(pk=row.approval_id)
    assert (signature.kind, signature.subject_id, signature.meaning) == ("material", str(row.pk), "approved")
    assert signature.content_hash == row.content_hash == approvals.content_hash_of(MaterialVersion.objects.get())


def test_nobody_approves_what_they_wrote(cast):
    author = make_person("author", roles=("method_owner", "qa_manager"))
    draft = master.draft_material(by=author, code="M", values={"name": "M", "phase": "liquid", "procedure_number": "P"})
    with pytest.raises(NotAllowed) as refused:
        approve("material", draft, author)
    assert refused.value.code == "approval.own_work"
    with pytest.raises(IntegrityError), transaction.atomic():
        MaterialVersion.objects.filter(pk=draft.pk).update(approved_by=author)


def test_whoever_changed_a_draft_may_not_approve_it_and_neither_may_its_author(cast):
    draft = builders.draft_material(cast)
    second = make_person("second_owner", roles=("method_owner",))
    master.change_material(pk=draft.pk, by=second, values={"formula": "C4 H8 O2"}, reason="spacing")
    for person in (second, cast.method_owner):
        with pytest.raises(NotAllowed):
            approve("material", draft, person)
    assert approve("material", draft, cast.qa_manager).state == "approved"


def test_only_a_method_owner_or_qa_approves(cast):
    draft = builders.draft_material(cast)
    for person in (cast.analyst, cast.reviewer, cast.administrator, cast.outsider):
        with pytest.raises(NotAllowed):
            approve("material", draft, person)


def test_a_draft_that_changed_after_it_was_shown_is_not_approved(cast):
    draft = builders.draft_material(cast)
    shown = approvals.content_hash_of(MaterialVersion.objects.get())
    master.change_material(pk=draft.pk, by=cast.method_owner, values={"acceptance": "stricter"})
    with pytest.raises(Stale) as refused:
        approve("material", draft, cast.qa_manager, shown)
    assert refused.value.code == "approval.changed" and refused.value.status == 409
    assert MaterialVersion.objects.get().state == "draft" and not Signature.objects.exists()


def test_a_second_approval_is_not_possible(cast, lab):
    with pytest.raises(NotPossible):
        approve("material", lab.material, cast.qa_manager)
    with pytest.raises(NotVisible):
        approvals.approvable("material", 0)
    with pytest.raises(NotVisible):
        approvals.approvable("sandwich", 1)


def test_a_new_version_retires_the_one_before_it(cast, lab):
    second = builders.approved("material", builders.draft_material(cast, acceptance="stricter"), cast)
    lab.material.refresh_from_db()
    assert (lab.material.state, second.number, second.state) == ("retired", 2, "approved")
    assert list(selectors.approved_material_versions()) == [second]
    assert TrailEntry.objects.filter(event="material.retired").count() == 1


def test_an_approved_version_is_never_changed(cast, lab):
    with pytest.raises(NotPossible) as refused:
        master.change_material(pk=lab.material.pk, by=cast.method_owner, values={"name": "other"})
    assert refused.value.code == "material.not_a_draft"


def test_one_draft_of_a_material_at_a_time(cast):
    builders.draft_material(cast)
    with pytest.raises(NotPossible) as refused:
        builders.draft_material(cast)
    assert refused.value.code == "material.open_draft"


def test_a_change_keeps_old_and_new_in_the_trail(cast):
    draft = builders.draft_material(cast)
    master.change_material(pk=draft.pk, by=cast.method_owner, values={"formula": "C4H8O"}, reason="typing error")
    entry = TrailEntry.objects.get(event="material.changed")
    assert "c4h8o2" in entry.search_text and entry.reason == "typing error"


@pytest.mark.parametrize(
    ("values", "code", "field"),
    [
        ({"name": " "}, "material.no_name", "name"),
        ({"phase": "plasma"}, "master.value", "phase"),
        ({"review_mode": "closed"}, "master.value", "review_mode"),
        ({"procedure_number": ""}, "master.value", "procedure_number"),
        ({"name": "x" * 201}, "master.value", "name"),
        ({"watch_list_id": 0}, "master.value", "watch_list"),
        ({"smiles": "C1CC"}, None, "smiles"),
        ({"repeat_unit": "C((("}, None, "repeat_unit"),
    ],
)
def test_a_material_with_a_wrong_value_is_refused_at_its_field(cast, values, code, field):
    with pytest.raises(BadInput) as refused:
        builders.draft_material(cast, **values)
    assert refused.value.params["field"] == field
    assert code is None or refused.value.code == code
    assert not MaterialVersion.objects.exists()


def test_the_columns_of_an_approval_cannot_be_set_from_outside(cast):
    for values in ({"state": "approved"}, {"approved_by_id": 1}, {"edited_by": []}):
        with pytest.raises(NotAllowed):
            builders.draft_material(cast, **values)


def test_only_a_method_owner_drafts(cast):
    for person in (cast.analyst, cast.reviewer, cast.qa_manager, cast.administrator):
        with pytest.raises(NotAllowed):
            master.draft_method(by=person, name="m")
        with pytest.raises(NotAllowed):
            master.load_group_table(by=person, text="")


def test_a_procedure_needs_a_range_and_a_method(cast, lab):
    for values, field in (
        ({"low_cm1": 4000.0, "high_cm1": 650.0}, "low_cm1"),
        ({"method_id": 0}, "method"),
        ({"technique": "x"}, "technique"),
    ):
        with pytest.raises(BadInput) as refused:
            builders.draft_procedure(cast, lab.method, **values)
        assert refused.value.params["field"] == field
    assert Procedure.objects.count() == 1


def test_unknown_parameters_of_a_method_are_refused(cast):
    with pytest.raises(BadInput) as refused:
        master.draft_method(by=cast.method_owner, name="m", parameters={"no_such_number": 1.0})
    assert refused.value.code == "method.parameters"


def test_a_group_table_that_does_not_hold_together_is_refused(cast):
    for text in ("", "version = 1", "[[group]]\nid = 'x'"):
        with pytest.raises(BadInput):
            master.load_group_table(by=cast.method_owner, text=text)


def test_a_reference_is_read_before_it_is_kept(cast, lab):
    with pytest.raises(BadInput) as refused:
        master.register_reference(
            by=cast.method_owner,
            code="R-2",
            name="x",
            material_id=None,
            file_name="x.dx",
            data=b"nothing",
            values={"standard_lot": "S", "technique": "transmission", "phase": "liquid"},
        )
    assert refused.value.params["field"] == "file"
    assert Reference.objects.count() == 1


def test_a_reference_code_is_taken_once_whatever_the_blanks(cast, lab):
    with pytest.raises(BadInput) as refused:
        builders.register_reference(cast, lab.material, code=" R-1 ", seed=7)
    assert refused.value.code == "reference.code_taken"


def test_the_reference_of_the_same_technique_and_phase_comes_first(cast, lab):
    newer = builders.approved("reference", builders.register_reference(cast, lab.material, code="R-2", seed=5), cast)
    builders.register_reference(cast, lab.material, code="R-3", seed=6)
    found = selectors.reference_for(lab.material.material, technique="transmission", phase="liquid")
    assert found == newer
    assert selectors.reference_for(lab.material.material, technique="atr", phase="liquid") == newer
    assert selectors.reference_is_valid(newer, on=date(2098, 1, 1))
    assert not selectors.reference_is_valid(newer, on=date(2099, 1, 2))


@pytest.mark.parametrize(
    ("items", "code"),
    [
        ([], "watch_list.empty"),
        ([("water", 0)], "watch_list.unknown_reference"),
        ([("water", None), ("water", None)], "watch_list.names"),
        ([(" ", None)], "watch_list.names"),
    ],
)
def test_a_watch_list_names_existing_references_once(cast, lab, items, code):
    items = [(name, lab.reference.pk if pk is None else pk) for name, pk in items]
    with pytest.raises(BadInput) as refused:
        master.draft_watch_list(by=cast.method_owner, code="W", title="t", items=items)
    assert refused.value.code == code
    assert not WatchList.objects.exists()


def test_a_watch_list_is_versioned(cast, lab):
    rows = [
        master.draft_watch_list(by=cast.method_owner, code="W", title="t", items=[("ester", lab.reference.pk)])
        for _ in range(2)
    ]
    assert [row.number for row in rows] == [1, 2]
    assert builders.approved("watch_list", rows[1], cast).state == "approved"


def test_a_material_is_retired_with_a_reason(cast, lab):
    with pytest.raises(BadInput):
        master.retire_material(pk=lab.material.pk, by=cast.qa_manager, reason=" ")
    assert master.retire_material(pk=lab.material.pk, by=cast.qa_manager, reason="no longer bought").state == "retired"
    with pytest.raises(NotPossible):
        master.retire_material(pk=lab.material.pk, by=cast.qa_manager, reason="again")
