"""Drafts of master data: materials, procedures, methods, the group table, watch lists, references."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence

import rfc8785
from django.core.exceptions import ValidationError
from django.db import models
from django.db.models import Max
from django.utils import timezone

from labsite.accounts.models import User
from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible
from labsite.trail.events import Event
from labsite.trail.record import record, unit_of_work
from spectra import permissions, store
from spectra.core import formats, group_table, structure
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.types import SpectrumBlock
from spectra.core.version import CORE_VERSION
from spectra.days import today
from spectra.header_check import contradictions
from spectra.models import (
    ApprovalState,
    GroupTable,
    Material,
    MaterialVersion,
    MethodVersion,
    Procedure,
    RawFile,
    Reference,
    ReviewMode,
    WatchItem,
    WatchList,
)
from spectra.reading import read_options
from spectra.services.approvals import APPROVAL_COLUMNS, content_of, subject_of
from spectra.services.uploads import clean_file_name

MATERIAL_FIELDS = (
    "name formula smiles repeat_unit composition_note phase expected_groups forbidden_groups not_separable_from"
    " companion_tests cautions acceptance review_mode procedure_number watch_list_id"
).split()
PROCEDURE_FIELDS = (
    "title effective_from technique preparation accessory_text atr_crystal_index atr_angle_deg atr_reflections low_cm1"
    " high_cm1 resolution_cm1 scans repeats missing_bands_allowed extra_bands_allowed size_order_required"
    " solid_state_repeat method_id"
).split()


HEADER_CONTRADICTED = "header_contradicted"  # among a reference's answers: why the file's own header is wrong
# What the second reading of a material can be: the blind one needs pages that are not there.
OFFERED_REVIEW_MODES = (ReviewMode.OPEN,)

REFERENCE_FIELDS = (
    "standard_lot certificate standard_received_on standard_expires_on spectrum_valid_until technique phase"
    " instrument_id resolution_cm1 atr_crystal_index atr_angle_deg atr_reflections block_index answers"
).split()


def check_structure(smiles: str, *, field: str = "smiles") -> None:
    """Refuse a structure that RDKit cannot read, at the field it was typed into."""
    if not smiles:
        return
    try:
        structure.check_smiles(smiles)
    except CoreError as error:
        raise BadInput(error.problem.code, error.problem.message, remedy=error.problem.remedy, field=field) from None


def _judge_chemistry(values: Mapping[str, object]) -> None:
    """Structures that can be read, and groups that the program knows: an analysis must not find out later."""
    check_structure(str(values.get("smiles", "")))
    check_structure(str(values.get("repeat_unit", "")), field="repeat_unit")
    for field in ("expected_groups", "forbidden_groups"):
        unknown = sorted(set(values.get(field) or ()) - set(group_table.GROUP_IDS) - set(group_table.CLASS_IDS))
        if unknown:
            raise BadInput("material.unknown_group", "No group is called " + ", ".join(unknown) + ".", field=field)


def _judge_review_mode(values: Mapping[str, object]) -> None:
    mode = values.get("review_mode", ReviewMode.OPEN)
    if mode in ReviewMode.values and mode not in OFFERED_REVIEW_MODES:
        raise BadInput(
            "material.review_mode_not_offered",
            "The blind second reading is not offered yet.",
            remedy="Choose the open one.",
            field="review_mode",
        )


def draft_material(*, by: User, code: str, values: Mapping[str, object]) -> MaterialVersion:
    """A new draft version of a material; the material itself is made with its first version."""
    permissions.require_method_owner(by)
    code = code.strip().upper()
    if not code:
        raise BadInput("material.no_code", "Give the material a code.", field="code")
    _only(values, MATERIAL_FIELDS)
    if not str(values.get("name", "")).strip():
        raise BadInput("material.no_name", "Give the declared name.", field="name")
    _judge_chemistry(values)
    _judge_review_mode(values)
    with unit_of_work():
        material, _ = Material.objects.get_or_create(code=code, defaults={"created_at": timezone.now()})
        material = Material.objects.select_for_update().get(pk=material.pk)
        if material.versions.filter(state=ApprovalState.DRAFT).exists():
            raise NotPossible(
                "material.open_draft",
                f"{code} already has a draft version.",
                remedy="Change that draft, or have it approved first.",
                field="code",
            )
        last = material.versions.aggregate(last=Max("number"))["last"] or 0
        version = _judged(
            MaterialVersion(material=material, number=last + 1, author=by, created_at=timezone.now(), **values)
        )
        version.save(force_insert=True)
        _record_draft(Event.MATERIAL_DRAFTED, "material", version, by)
    return version


def change_material(*, pk: int, by: User, values: Mapping[str, object], reason: str = "") -> MaterialVersion:
    """Change a draft. Old and new values go into the trail."""
    permissions.require_method_owner(by)
    _only(values, MATERIAL_FIELDS)
    _judge_chemistry(values)
    _judge_review_mode(values)
    with unit_of_work():
        version = MaterialVersion.objects.select_for_update().filter(pk=pk).first()
        if version is None:
            raise NotVisible("material.unknown", "There is no such material.")
        if version.state != ApprovalState.DRAFT:
            raise NotPossible(
                "material.not_a_draft",
                "An approved version is never changed.",
                remedy="Draft a new version of the material.",
            )
        old = content_of(version)["content"]
        for name, value in values.items():
            setattr(version, name, value)
        if by.pk != version.author_id and by.pk not in version.edited_by:
            version.edited_by = [*version.edited_by, by.pk]  # whoever changed it may not approve it either
        _judged(version).save()
        new = content_of(version)["content"]
        changed = [name for name in new if new[name] != old[name]]
        record(
            Event.MATERIAL_CHANGED,
            by=by,
            subject=subject_of("material", version),
            old={name: old[name] for name in changed},
            new={name: new[name] for name in changed},
            reason=reason,
        )
    return version


def draft_procedure(*, by: User, number: str, values: Mapping[str, object]) -> Procedure:
    permissions.require_method_owner(by)
    number = number.strip().upper()
    if not number:
        raise BadInput("procedure.no_number", "Give the procedure's number.", field="number")
    _only(values, PROCEDURE_FIELDS)
    with unit_of_work():
        last = Procedure.objects.filter(number=number).aggregate(last=Max("edition"))["last"] or 0
        row = _judged(Procedure(number=number, edition=last + 1, author=by, created_at=timezone.now(), **values))
        if row.low_cm1 >= row.high_cm1:
            raise BadInput("procedure.range", "The range must begin below its end.", field="low_cm1")
        row.save(force_insert=True)
        _record_draft(Event.PROCEDURE_DRAFTED, "procedure", row, by)
    return row


def draft_method(
    *, by: User, name: str, parameters: Mapping[str, object] | None = None, refuse_same: bool = False
) -> MethodVersion:
    """A new version of the numeric parameters; without any, the ones this code version ships with.

    `refuse_same`: raise NotPossible where a version with the very same parameters exists already.
    """
    permissions.require_method_owner(by)
    try:
        params = MethodParams.from_dict(dict(parameters)) if parameters is not None else MethodParams()
    except (CoreError, ValueError, TypeError) as error:
        raise BadInput("method.parameters", f"These parameters are not usable: {error}", field="parameters") from None
    values = params.to_dict()
    digest = hashlib.sha256(rfc8785.dumps(values)).hexdigest()
    with unit_of_work():
        if refuse_same:
            _judge_new(MethodVersion, digest, code="method.same", what="the very same parameters")
        last = MethodVersion.objects.aggregate(last=Max("number"))["last"] or 0
        row = MethodVersion.objects.create(
            number=last + 1,
            name=name.strip(),
            parameters=values,
            digest=digest,
            core_version=CORE_VERSION,
            author=by,
            created_at=timezone.now(),
        )
        _record_draft(Event.METHOD_DRAFTED, "method", row, by)
    return row


def load_group_table(*, by: User, text: str, refuse_same: bool = False) -> GroupTable:
    """A new draft version of the group table from its text; refused with the row when it does not hold together.

    `refuse_same`: raise NotPossible where a version that says the very same exists already.
    """
    permissions.require_method_owner(by)
    try:
        table = group_table.load(text)
    except CoreError as error:
        raise BadInput(error.problem.code, error.problem.message, remedy=error.problem.remedy, field="text") from None
    with unit_of_work():
        if refuse_same:
            _judge_new(GroupTable, table.digest, code="group_table.same", what="the very same table")
        last = GroupTable.objects.aggregate(last=Max("number"))["last"] or 0
        row = GroupTable.objects.create(
            number=last + 1, text=text, digest=table.digest, author=by, created_at=timezone.now()
        )
        record(
            Event.GROUP_TABLE_LOADED,
            by=by,
            subject=subject_of("group_table", row),
            facts={"digest": table.digest, "groups": len(table.groups)},
        )
    return row


def _judge_new(model: type[MethodVersion] | type[GroupTable], digest: str, *, code: str, what: str) -> None:
    """Refuse a second version of what stands in a draft or an approved one already."""
    same = model.objects.filter(digest=digest).exclude(state=ApprovalState.RETIRED).order_by("-number").first()
    if same is None:
        return
    said = str(same)
    raise NotPossible(
        code,
        f"{said[:1].upper()}{said[1:]} holds {what} already; it is {same.get_state_display()}.",
        remedy="Use that one." if same.state == ApprovalState.APPROVED else "Have that draft approved.",
        version=same.number,
    )


def register_reference(
    *,
    by: User,
    code: str,
    name: str,
    material_id: int | None,
    file_name: str,
    data: bytes,
    values: Mapping[str, object],
) -> Reference:
    """A draft reference from its file. A file that cannot be read to one spectrum is refused, and nothing is kept."""
    permissions.require_method_owner(by)
    _only(values, REFERENCE_FIELDS)
    code, name = code.strip(), name.strip()
    if not code or not name:
        raise BadInput("reference.no_name", "Give the reference a code and a name.", field="name" if code else "code")
    answers = dict(values.get("answers") or {})
    result = formats.read(data, read_options(answers, str(values["technique"])))
    found = [block for block in result.blocks if isinstance(block, SpectrumBlock)]
    if len(found) > 1 and "block_index" not in values:
        titles = "; ".join(f"{block.index + 1} is {block.title or 'untitled'}" for block in found[:12])
        raise BadInput(
            "reference.several_spectra",
            f"The file holds {len(found)} spectra: {titles}.",
            remedy="Say which of them is the reference.",
            field="block_index",
        )
    index = int(values.get("block_index", found[0].index if found else 0))
    values = {**values, "block_index": index}
    block = next((block for block in result.blocks if block.index == index), None)
    if not isinstance(block, SpectrumBlock):
        problem = result.problem or (block.problem if block else None)
        raise BadInput(
            problem.code if problem else "reference.no_such_block",
            problem.message if problem else f"The file has no block {index + 1}.",
            remedy=problem.remedy if problem else "",
            field="file",
            line=problem.line if problem else None,
            question=problem.question if problem else None,
        )
    against_header = _judge_header(block, values)
    sha256 = store.put(data)
    with unit_of_work():
        if Reference.objects.filter(code=code).exists():
            raise BadInput("reference.code_taken", f"There is already a reference {code}.", field="code")
        raw_file, _ = RawFile.objects.get_or_create(
            sha256=sha256, defaults={"size_bytes": len(data), "stored_by": by, "stored_at": timezone.now()}
        )
        row = _judged(
            Reference(
                code=code,
                name=name,
                material_id=material_id,
                raw_file=raw_file,
                file_name=clean_file_name(file_name),
                author=by,
                created_at=timezone.now(),
                **values,
            )
        )
        row.save(force_insert=True)
        record(
            Event.REFERENCE_REGISTERED,
            by=by,
            subject=subject_of("reference", row),
            facts={"file": row.file_name, "sha256": sha256, "standard_lot": row.standard_lot}
            | ({"against_the_header": against_header} if against_header else {}),
            reason=str(row.answers.get(HEADER_CONTRADICTED, "")),
        )
    return row


def _judge_header(block: SpectrumBlock, values: Mapping[str, object]) -> list[str]:
    """Refuse what the file's own header contradicts, unless the person says why the header is wrong; what it says."""
    found = contradictions(block.headers, values, today=today())
    why = str((values.get("answers") or {}).get(HEADER_CONTRADICTED, "")).strip()
    if found and not why:
        text = "; ".join(one.text for one in found)
        raise BadInput(
            "reference.header_contradicts",
            f"{text[:1].upper()}{text[1:]}.",
            remedy="Correct what you stated, or say below why the file's header is wrong.",
            field=found[0].field,
        )
    if why and not found:
        raise BadInput(
            "reference.header_agrees",
            "The file's header contradicts nothing that you stated.",
            remedy="Leave this empty.",
            field=HEADER_CONTRADICTED,
        )
    return [one.text for one in found]


def draft_watch_list(*, by: User, code: str, title: str, items: Sequence[tuple[str, int]]) -> WatchList:
    """A new version of a watch list: (name, reference id) of each contaminant."""
    permissions.require_method_owner(by)
    if not items:
        raise BadInput("watch_list.empty", "Name at least one contaminant.", field="items")
    code = code.strip()
    if not code:
        raise BadInput("watch_list.no_code", "Give the watch list a code.", field="code")
    items = [(name.strip(), reference_id) for name, reference_id in items]
    if len({name for name, _ in items}) < len(items) or not all(name for name, _ in items):
        raise BadInput("watch_list.names", "Give each contaminant a name of its own.", field="items")
    wanted = {reference_id for _, reference_id in items}
    if Reference.objects.filter(pk__in=wanted).count() < len(wanted):
        raise BadInput("watch_list.unknown_reference", "An item names a reference that does not exist.", field="items")
    with unit_of_work():
        last = WatchList.objects.filter(code=code).aggregate(last=Max("number"))["last"] or 0
        row = WatchList.objects.create(
            code=code, number=last + 1, title=title.strip(), author=by, created_at=timezone.now()
        )
        for name, reference_id in items:
            WatchItem.objects.create(watch_list=row, name=name, reference_id=reference_id)
        _record_draft(Event.WATCH_LIST_CHANGED, "watch_list", row, by)
    return row


def retire_material(*, pk: int, by: User, reason: str) -> MaterialVersion:
    permissions.require_approver(by)
    if not reason.strip():
        raise BadInput("material.no_reason", "Say why it is retired.", field="reason")
    with unit_of_work():
        version = MaterialVersion.objects.select_for_update().filter(pk=pk).first()
        if version is None:
            raise NotVisible("material.unknown", "There is no such material.")
        if version.state != ApprovalState.APPROVED:
            raise NotPossible("material.not_approved", "Only an approved version can be retired.")
        version.state = ApprovalState.RETIRED
        version.save(update_fields=["state"])
        record(Event.MATERIAL_RETIRED, by=by, subject=subject_of("material", version), reason=reason.strip())
    return version


def _record_draft(event: Event, kind: str, row: models.Model, by: User) -> None:
    record(event, by=by, subject=subject_of(kind, row), new=content_of(row)["content"])


def _judged(row: models.Model) -> models.Model:
    """The row with every value in its column's own type; a value that its column cannot hold is refused by name."""
    unset = {field.name for field in row._meta.concrete_fields if field.null and field.value_from_object(row) is None}
    try:
        row.clean_fields(exclude=APPROVAL_COLUMNS | unset)
    except ValidationError as error:
        name, messages = next(iter(error.message_dict.items()))
        label = row._meta.get_field(name).verbose_name
        raise BadInput("master.value", f"{label.capitalize()}: {messages[0]}", field=name) from None
    return row


def _only(values: Mapping[str, object], allowed: Sequence[str]) -> None:
    unknown = sorted(set(values) - set(allowed))
    if unknown:
        raise NotAllowed("master.unknown_fields", "These fields cannot be set: " + ", ".join(unknown))
