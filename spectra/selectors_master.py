"""Reads for the pages of master data: versions, what may be chosen, what waits for approval, what a file shows."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from datetime import date, datetime
from functools import lru_cache
from pathlib import Path

from django.conf import settings
from django.db import models
from django.db.models import OuterRef, Prefetch, Q, QuerySet, Subquery
from django.utils import timezone

from labsite.accounts.models import User, fold_username
from labsite.errors import DomainError, NotVisible
from spectra import computing, days, permissions, selectors, store
from spectra.core import group_table, structure
from spectra.core.errors import CoreError
from spectra.core.params import MethodParams
from spectra.core.types import SpectrumBlock
from spectra.models import (
    Accessory,
    ApprovalState,
    GroupTable,
    Instrument,
    InstrumentCheck,
    Material,
    MaterialVersion,
    MethodVersion,
    Procedure,
    Qualification,
    RawFile,
    Reference,
    Upload,
    WatchItem,
    WatchList,
)
from spectra.services.approvals import APPROVABLE, content_of

SHIPPED_METHOD_NAME = "Parameters as shipped"
SHIPPED_GROUP_TABLE = "fixtures/group_table/version_1.toml"
UNITS = (("_cm1", "cm⁻¹"), ("_points", "points"), ("_fraction", "fraction"), ("_share", "share"), ("_ratio", "ratio"))
CHECKS_SHOWN = 50
DIFFERENCE_LINES = 400
NOT_COMPARED = {"number", "edition", "digest"}  # they differ between any two versions


@dataclass(frozen=True)
class Parameter:
    """One number of a method, with how the shipped method has it. `unit` may be empty."""

    name: str
    value: str
    unit: str
    shipped: str
    differs: bool


@dataclass(frozen=True)
class ChangedField:
    """A field in which a version differs from the one before."""

    name: str
    before: str
    after: str


@dataclass(frozen=True)
class StructureFacts:
    """A structure as its page shows it, or the sentence why it cannot be read."""

    drawn: structure.Structure | None
    groups: tuple[str, ...] = ()
    problem: str = ""
    group_ids: tuple[str, ...] = ()


def kind_of(row: models.Model) -> str:
    """The name under which a record is approved and recorded in the trail."""
    return next(kind for kind, (model, _) in APPROVABLE.items() if isinstance(row, model))


def person_named(username: str) -> User:
    """The account behind a user name typed at a terminal."""
    person = User.objects.filter(username_key=fold_username(username)).first()
    if person is None:
        raise NotVisible("account.unknown", f"There is no account {username}.")
    return person


def _or_404(rows: QuerySet, pk: int, what: str) -> models.Model:
    row = rows.filter(pk=pk).first()
    if row is None:
        raise NotVisible(f"{what.replace(' ', '_')}.unknown", f"There is no such {what}.")
    return row


def _with_people(rows: QuerySet) -> QuerySet:
    return rows.select_related("author", "approved_by", "approval")


# Group tables and methods


def group_tables() -> QuerySet[GroupTable]:
    return _with_people(GroupTable.objects.order_by("-number"))


def group_table_version(pk: int) -> GroupTable:
    return _or_404(group_tables(), pk, "group table")


def group_table_in_force() -> GroupTable | None:
    return group_tables().filter(state=ApprovalState.APPROVED).first()


def parsed(row: GroupTable) -> group_table.GroupTable | None:
    """The table behind a version's text; None where this version of the program cannot read an older text any more."""
    try:
        return computing.parsed_table(row.digest, row.text)
    except CoreError:
        return None


def groups_to_choose() -> list[tuple[str, str]]:
    """(identifier, name) of the groups of the approved table; empty while no table is approved."""
    row = group_table_in_force()
    table = parsed(row) if row else None
    return [(group.id, group.name) for group in table.groups] if table else []


@lru_cache(maxsize=1)
def shipped_group_table() -> str:
    """The text of the table that comes with this version of the program."""
    return (Path(settings.BASE_DIR) / SHIPPED_GROUP_TABLE).read_text(encoding="utf-8")


def shipped_group_table_row() -> GroupTable | None:
    """The version that already holds the shipped text, so that nobody loads it twice."""
    digest = group_table.load(shipped_group_table()).digest
    return GroupTable.objects.filter(digest=digest).order_by("-number").first()


def methods() -> QuerySet[MethodVersion]:
    return _with_people(MethodVersion.objects.order_by("-number"))


def method(pk: int) -> MethodVersion:
    return _or_404(methods(), pk, "method version")


def approved_methods() -> QuerySet[MethodVersion]:
    return methods().filter(state=ApprovalState.APPROVED)


def shipped_method_row() -> MethodVersion | None:
    """The version that already holds the shipped parameters."""
    shipped = MethodParams().to_dict()
    return next((row for row in methods() if row.parameters == shipped), None)


def parameters_of(row: MethodVersion) -> list[Parameter]:
    shipped = MethodParams().to_dict()
    rows = []
    for name, value in row.parameters.items():
        unit = next(
            (unit for ending, unit in UNITS if name.endswith(ending)), "absorbance" if "absorbance" in name else ""
        )
        rows.append(
            Parameter(name, _as_text(value), unit, _as_text(shipped.get(name, "–")), value != shipped.get(name))
        )
    return rows


def _as_text(value: object) -> str:
    if isinstance(value, list | tuple):
        return ", ".join(_as_text(item) for item in value) or "–"
    if isinstance(value, dict):
        return "; ".join(f"{key}: {_as_text(item)}" for key, item in value.items()) or "–"
    if value is None or value == "":
        return "–"
    if isinstance(value, bool):
        return "yes" if value else "no"
    return f"{value:.10g}" if isinstance(value, float) else str(value)


# Materials


def draft_of(material: Material) -> MaterialVersion | None:
    return material.versions.filter(state=ApprovalState.DRAFT).first()


def versions_of(material: Material) -> QuerySet[MaterialVersion]:
    return _with_people(material.versions.order_by("-number"))


def structure_facts(text: str) -> StructureFacts:
    """What a structure is read as, and the groups of the approved table that it holds."""
    if not text:
        return StructureFacts(None)
    try:
        drawn = structure.check_smiles(text)
        row = group_table_in_force()
        table = parsed(row) if row else None
        names = {group.id: group.name for group in table.groups} if table else {}
        found = structure.expected_groups(text, table) if table else ()
    except CoreError as error:
        return StructureFacts(None, problem=f"{error.problem.message} {error.problem.remedy}".strip())
    return StructureFacts(drawn, tuple(names.get(group, group) for group in found), group_ids=tuple(found))


def material_structure(version: MaterialVersion) -> StructureFacts:
    return structure_facts(version.smiles or version.repeat_unit)


def procedures_to_choose() -> list[tuple[str, str]]:
    """(number, words) of every procedure with an approved edition."""
    rows = Procedure.objects.filter(state=ApprovalState.APPROVED).order_by("number", "-edition")
    latest: dict[str, str] = {}
    for row in rows:
        latest.setdefault(row.number, f"{row.number}, edition {row.edition}: {row.title}")
    return list(latest.items())


def watch_lists_to_choose() -> QuerySet[WatchList]:
    return WatchList.objects.filter(state=ApprovalState.APPROVED).order_by("title", "-number")


def effective_edition(number: str) -> Procedure | None:
    return selectors.effective_procedure(number, on=days.today())


def editions_in_force(rows: Iterable[Procedure]) -> set[int]:
    """For each procedure among `rows` the key of the edition in force today, as `effective_procedure` finds it."""
    latest: dict[str, Procedure] = {}
    for row in rows:
        if row.state == ApprovalState.APPROVED and row.effective_from <= days.today():
            held = latest.get(row.number)
            if held is None or (row.effective_from, row.edition) > (held.effective_from, held.edition):
                latest[row.number] = row
    return {row.pk for row in latest.values()}


def editions_of(procedure: Procedure) -> QuerySet[Procedure]:
    return selectors.procedures().filter(number=procedure.number)


def materials_named(number: str) -> QuerySet[MaterialVersion]:
    """Approved materials that are tested by a procedure."""
    return selectors.approved_material_versions().filter(procedure_number=number)


# Watch lists and references


def watch_lists() -> QuerySet[WatchList]:
    return _with_people(WatchList.objects.order_by("code", "-number")).prefetch_related(
        Prefetch("items", WatchItem.objects.select_related("reference__raw_file").order_by("pk"))
    )


def watch_list(pk: int) -> WatchList:
    return _or_404(watch_lists(), pk, "watch list")


def find_references(text: str) -> QuerySet[Reference]:
    """References whose code, name, material or lot of the standard holds every word."""
    rows = selectors.references()
    for word in text.split():
        rows = rows.filter(
            Q(code__icontains=word)
            | Q(name__icontains=word)
            | Q(standard_lot__icontains=word)
            | Q(material__code__icontains=word)
        )
    return rows


def references_to_choose() -> QuerySet[Reference]:
    """Approved references that no later one replaced."""
    return selectors.references().filter(state=ApprovalState.APPROVED, superseded_by=None)


def reference_block(reference: Reference) -> SpectrumBlock | None:
    """The reference's spectrum as the strict reader gives it today; None where it cannot be read any more."""
    try:
        return computing.reference_block(reference)
    except (CoreError, DomainError):
        return None


def raw_file(sha256: str) -> tuple[str, bytes]:
    """(name under which it last came, bytes) of a stored raw file."""
    row = RawFile.objects.filter(sha256=sha256).first()
    if row is None:
        raise NotVisible("raw_file.unknown", "There is no such file.")
    names = (
        Reference.objects.filter(raw_file=row).order_by("-pk").values_list("file_name", flat=True),
        Upload.objects.filter(raw_file=row).order_by("-pk").values_list("file_name", flat=True),
    )
    name = next((found for found in (rows.first() for rows in names) if found), f"{sha256[:12]}.dat")
    return name, store.get(sha256)


# Instruments


@dataclass(frozen=True)
class AccessoryState:
    accessory: Accessory
    last_check: InstrumentCheck | None


@dataclass(frozen=True)
class InstrumentState:
    """An instrument with its accessories and their last checks; its qualifications, the newest first."""

    instrument: Instrument
    accessories: tuple[AccessoryState, ...]
    qualifications: tuple[Qualification, ...]

    @property
    def requalify_on(self) -> date | None:
        """When the newest qualification says that the next one is due."""
        return self.qualifications[0].due_on if self.qualifications else None


def instruments() -> list[InstrumentState]:
    return _states(Instrument.objects.order_by("code"))


def instrument(pk: int) -> InstrumentState:
    states = _states(Instrument.objects.filter(pk=pk))
    if not states:
        raise NotVisible("instrument.unknown", "There is no such instrument.")
    return states[0]


def _states(rows: QuerySet[Instrument]) -> list[InstrumentState]:
    last_check = InstrumentCheck.objects.filter(accessory=OuterRef("pk"), performed_at__lte=timezone.now())
    accessories = Accessory.objects.order_by("code").annotate(
        last_check_pk=Subquery(last_check.order_by("-performed_at", "-pk").values("pk")[:1])
    )
    qualifications = Qualification.objects.select_related("recorded_by").order_by("-performed_on", "-pk")
    found = list(
        rows.prefetch_related(Prefetch("accessories", accessories), Prefetch("qualifications", qualifications))
    )
    checks = InstrumentCheck.objects.in_bulk(
        [accessory.last_check_pk for row in found for accessory in row.accessories.all() if accessory.last_check_pk]
    )
    return [
        InstrumentState(
            row,
            tuple(AccessoryState(one, checks.get(one.last_check_pk)) for one in row.accessories.all()),
            tuple(row.qualifications.all()),
        )
        for row in found
    ]


def instruments_in_service() -> QuerySet[Instrument]:
    return Instrument.objects.filter(in_service=True).order_by("code")


def checks_of(row: Instrument) -> list[InstrumentCheck]:
    checks = InstrumentCheck.objects.filter(accessory__instrument=row).select_related(
        "accessory", "recorded_by", "raw_file"
    )
    return list(checks.order_by("-performed_at", "-pk")[:CHECKS_SHOWN])


def accessory(pk: int) -> Accessory:
    return _or_404(Accessory.objects.select_related("instrument"), pk, "accessory")


def usual_validity(row: Accessory, *, begins: datetime) -> datetime | None:
    """How long the accessory's last check was good for, counted from `begins`."""
    last = row.checks.order_by("-performed_at").first()
    return begins + (last.valid_until - last.performed_at) if last else None


# Approval


def why_not_approve(row: models.Model, person: User) -> str:
    """Why `person` cannot approve a record, as a sentence to them; empty when they can. The service judges again."""
    if row.state != ApprovalState.DRAFT:
        return f"This record is {row.get_state_display()} already."
    if person.pk == row.author_id or person.pk in getattr(row, "edited_by", ()):
        return "You wrote this or a part of it. Another method owner or a QA manager has to approve it."
    if not permissions.may_approve_master_data(person):
        return "A method owner or a QA manager who did not write it approves it."
    return ""


def version_before(row: models.Model) -> models.Model | None:
    """The version that came before a record of the same thing; None for the first, and for kinds without versions."""
    same = {
        MaterialVersion: ({"material_id": getattr(row, "material_id", None)}, "number"),
        Procedure: ({"number": getattr(row, "number", None)}, "edition"),
        MethodVersion: ({}, "number"),
        GroupTable: ({}, "number"),
        WatchList: ({"code": getattr(row, "code", None)}, "number"),
    }.get(type(row))
    if same is None:
        return None
    conditions, order = same
    rows = type(row).objects.filter(**conditions, **{f"{order}__lt": getattr(row, order)})
    return rows.exclude(state=ApprovalState.DRAFT).order_by(f"-{order}").first()


def changes_between(before: models.Model, after: models.Model) -> list[ChangedField]:
    """The fields that differ, as people read them; of a group table, the lines."""
    if isinstance(after, GroupTable):
        return list(_line_changes(before.text, after.text))
    old, new = content_of(before)["content"], content_of(after)["content"]
    if isinstance(after, MethodVersion):
        old, new = ({**side, **side.pop("parameters")} for side in (old, new))
    differing = [name for name in new if name not in NOT_COMPARED and old.get(name) != new[name]]
    return [
        ChangedField(
            _field_words(after, name), _in_words(before, name, old.get(name)), _in_words(after, name, new[name])
        )
        for name in differing
    ]


def _in_words(row: models.Model, name: str, value: object) -> str:
    """A stored value as people know it: the record behind a key, the label of a choice, the names of groups."""
    field = next((field for field in row._meta.concrete_fields if field.name == name), None)
    if field is not None and field.is_relation and value is not None:
        return str(getattr(row, name))
    if field is not None and field.choices:
        return str(dict(field.flatchoices).get(value, value))
    if name in ("expected_groups", "forbidden_groups"):
        names = dict(groups_to_choose())
        value = [names.get(group, group) for group in value]
    if name == "items":
        value = [f"{item['name']} ({item['reference']})" for item in value]
    return _as_text(value)


def _field_words(row: models.Model, name: str) -> str:
    names = {field.name: str(field.verbose_name) for field in row._meta.concrete_fields}
    return names.get(name, name).replace("_", " ")


def _line_changes(before: str, after: str) -> Iterator[ChangedField]:
    old, new = before.splitlines(), after.splitlines()
    blocks = difflib.SequenceMatcher(None, old, new, autojunk=False).get_opcodes()
    shown = 0
    for what, i1, i2, j1, j2 in blocks:
        if what == "equal":
            continue
        shown += (i2 - i1) + (j2 - j1)
        if shown > DIFFERENCE_LINES:
            yield ChangedField("and more", "too much to show here", "compare the two texts")
            return
        yield ChangedField(f"line {j1 + 1}", "\n".join(old[i1:i2]) or "–", "\n".join(new[j1:j2]) or "–")
