"""Reading the trail: search by keyset pages, and the life of one record.

Totals are never counted: on a large trail that alone takes longer than a page may.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Q, QuerySet

from labsite.accounts.models import Role, User
from labsite.accounts.selectors import people_by_id
from labsite.errors import NotVisible

from .events import Event, in_words
from .models import TrailEntry, TrailPersonal
from .words import HASH, label_of, text_of

READERS = tuple(Role.values)
EXPORTERS = (Role.QA_MANAGER,)
EXPORT_CHUNK = 1000
SHOWN_IN_LINE = 3

Redaction = Callable[["User | None", "QuerySet[TrailEntry]"], "QuerySet[TrailEntry]"]
_redactions: list[Redaction] = []


def register_redaction(fn: Redaction) -> None:
    """Let `fn(by, entries)` take entries away from what `by` may read; `by` is None for nobody in particular.

    Every reading function here passes through all redactions.
    """
    _redactions.append(fn)


Related = Callable[[str], Iterable[tuple[str, "str | int"]]]
_related: dict[str, Related] = {}


def register_related(kind: str, fn: Related) -> None:
    """Let the history of a record of `kind` show the entries of other records too.

    `fn(subject_id)` names them as (kind, id); it is asked with whatever stands in the address, and answers with nothing
    for a record that it does not know.
    """
    _related[kind] = fn


def about(kind: str, subject_id: str | int) -> Q:
    """The entries that belong to the history of one record: its own and those of its related records."""
    wanted = Q(subject_kind=kind, subject_id=str(subject_id))
    for other_kind, other_id in _related[kind](str(subject_id)) if kind in _related else ():
        wanted |= Q(subject_kind=other_kind, subject_id=str(other_id))
    return wanted


@dataclass(frozen=True)
class Change:
    """One named value of an entry: before and after, or a fact that simply held."""

    name: str
    before: str
    after: str


@dataclass(frozen=True)
class EntryRow:
    """An entry as people read it."""

    seq: int
    at: datetime
    event: str
    event_label: str
    actor_name: str
    actor_username: str
    actor_roles: tuple[str, ...]
    address: str
    subject_kind: str
    subject_id: str
    subject_label: str
    reason: str
    facts: tuple[tuple[str, str], ...]
    changes: tuple[Change, ...]
    request_id: str
    entry_hash: str
    previous_hash: str
    canonical: str

    @property
    def gist(self) -> tuple[Change, ...]:
        """What fits into a line of a table: a few changes, or else a few facts; hashes say nothing there."""
        facts = (Change(name, "", value) for name, value in self.facts if not HASH.fullmatch(value))
        return (self.changes or tuple(facts))[:SHOWN_IN_LINE]

    @property
    def has_more(self) -> bool:
        """Whether `gist` leaves something out."""
        return len(self.gist) < len(self.changes or self.facts)


@dataclass(frozen=True)
class EntryPage:
    """Some entries, newest first; `next_before_seq` asks for the older ones (None: there are none)."""

    rows: list[EntryRow]
    next_before_seq: int | None


def visible(by: User | None) -> QuerySet[TrailEntry]:
    """The entries that `by` may read."""
    entries = TrailEntry.objects.all()
    for redact in _redactions:
        entries = redact(by, entries)
    return entries


def matching(
    *,
    by: User | None = None,
    text: str = "",
    event: str = "",
    actor_id: int | None = None,
    subject_kind: str = "",
    subject_id: str = "",
    since: datetime | None = None,
    until: datetime | None = None,
) -> QuerySet[TrailEntry]:
    """The entries that fit everything asked for; `since` is included, `until` is not.

    `text` is looked for, without regard to case, in labels, reasons and values, and in the names of the people who
    acted. `event` may be a whole event (`sample.changed`) or its first part (`sample`). A kind together with an id asks
    for the history of that record, as `timeline` tells it.
    """
    entries = visible(by)
    if text := text.strip():
        people = User.objects.filter(Q(printed_name__icontains=text) | Q(username__icontains=text))
        entries = entries.filter(
            Q(search_text__contains=text.casefold()) | Q(actor_id__in=list(people.values_list("pk", flat=True)))
        )
    if event:
        entries = entries.filter(event=event) if "." in event else entries.filter(event__startswith=f"{event}.")
    if actor_id is not None:
        entries = entries.filter(actor_id=actor_id)
    if subject_kind and subject_id:
        entries = entries.filter(about(subject_kind, subject_id))
    elif subject_kind:
        entries = entries.filter(subject_kind=subject_kind)
    elif subject_id:
        entries = entries.filter(subject_id=subject_id)
    if since is not None:
        entries = entries.filter(at__gte=since)
    if until is not None:
        entries = entries.filter(at__lt=until)
    return entries


def search(
    *,
    by: User | None = None,
    text: str = "",
    event: str = "",
    actor_id: int | None = None,
    subject_kind: str = "",
    since: datetime | None = None,
    until: datetime | None = None,
    before_seq: int | None = None,
    limit: int = 50,
) -> EntryPage:
    """One page of what `matching` finds, newest first, older than `before_seq`."""
    entries = matching(
        by=by, text=text, event=event, actor_id=actor_id, subject_kind=subject_kind, since=since, until=until
    )
    if before_seq is not None:
        entries = entries.filter(seq__lt=before_seq)
    found = list(entries.order_by("-seq")[: limit + 1])
    return EntryPage(rows=as_rows(found[:limit]), next_before_seq=found[limit - 1].seq if len(found) > limit else None)


def timeline(kind: str, id: str | int, *, by: User | None = None) -> list[EntryRow]:  # noqa: A002
    """Everything that happened to one record and its related ones, oldest first."""
    return as_rows(list(visible(by).filter(about(kind, id)).order_by("seq")))


def entry(seq: int, *, by: User | None = None) -> EntryRow:
    """One entry, or NotVisible."""
    found = visible(by).filter(seq=seq).first()
    if found is None:
        raise NotVisible("trail.no_such_entry", "There is no such entry in the trail.")
    return as_rows([found])[0]


def export_rows(entries: QuerySet[TrailEntry], *, through_seq: int) -> Iterator[EntryRow]:
    """All `entries` up to `through_seq`, oldest first, read in pieces."""
    after = 0
    while True:
        piece = list(entries.filter(seq__gt=after, seq__lte=through_seq).order_by("seq")[:EXPORT_CHUNK])
        if not piece:
            return
        yield from as_rows(piece)
        after = piece[-1].seq


def newest_seq() -> int:
    return TrailEntry.objects.order_by("-seq").values_list("seq", flat=True).first() or 0


@dataclass(frozen=True)
class PastVerification:
    """A verification as its entry tells it."""

    row: EntryRow
    whole: bool
    entries: int
    head_hash: str
    root_hash: str
    damages: tuple[str, ...]
    damages_found: int


def last_verification() -> PastVerification | None:
    """The newest verification of the trail that was recorded."""
    found = TrailEntry.objects.filter(event=Event.TRAIL_VERIFIED).order_by("-seq").first()
    if found is None:
        return None
    facts = _json(bytes(found.canonical)).get("facts", {})
    return PastVerification(
        row=as_rows([found])[0],
        whole=facts.get("whole") is True,
        entries=facts.get("entries", 0),
        head_hash=facts.get("head_hash", ""),
        root_hash=facts.get("root_hash", ""),
        damages=tuple(facts.get("damages", ())),
        damages_found=facts.get("damages_found", 0),
    )


def subject_kinds() -> list[tuple[str, str]]:
    """The kinds of record that occur, with their names, found by hopping along the index instead of reading it all."""
    kinds: list[tuple[str, str]] = []
    while True:
        last = kinds[-1][0] if kinds else ""
        following = TrailEntry.objects.filter(subject_kind__gt=last).order_by("subject_kind")
        kind = following.values_list("subject_kind", flat=True).first()
        if kind is None:
            return kinds
        kinds.append((kind, in_words(kind)))


def as_rows(entries: list[TrailEntry]) -> list[EntryRow]:
    """`entries` made readable, with one query for the names of those who acted and one for accounts acted upon."""
    personal = {
        found.entry_id: _json(bytes(found.details))
        for found in TrailPersonal.objects.filter(entry_id__in=[found.seq for found in entries])
    }
    accounts = people_by_id(
        {int(found.subject_id) for found in entries if found.subject_kind == "account" and found.subject_id.isdecimal()}
    )
    return [_row(found, personal.get(found.seq, {}), accounts) for found in entries]


def _json(data: bytes) -> dict:
    # A damaged entry is still shown, as far as its columns go: the verification says what happened to it.
    try:
        content = json.loads(data)
    except ValueError:
        return {}
    return content if isinstance(content, dict) else {}


def _row(found: TrailEntry, details: dict, accounts: dict[int, User]) -> EntryRow:
    stored = bytes(found.canonical)
    content = _json(stored)
    label = found.subject_label
    if found.subject_kind == "account" and found.subject_id.isdecimal() and int(found.subject_id) in accounts:
        person = accounts[int(found.subject_id)]
        label = f"{person.printed_name} ({person.username})"
    known = found.event in Event._value2member_map_
    old, new = content.get("old"), content.get("new")
    return EntryRow(
        seq=found.seq,
        at=found.at,
        event=found.event,
        event_label=Event(found.event).label if known else found.event,
        actor_name=details.get("printed_name") or _somebody(found),
        actor_username=details.get("username", ""),
        actor_roles=tuple(_role_label(role) for role in found.actor_roles.split()),
        address=details.get("address", ""),
        subject_kind=found.subject_kind,
        subject_id=found.subject_id,
        subject_label=label,
        reason=found.reason,
        facts=tuple(_facts(content.get("facts") or {})),
        changes=tuple(_changes(old or {}, new or {})),
        request_id=found.request_id,
        entry_hash=found.entry_hash,
        previous_hash=content.get("prev", ""),
        canonical=stored.decode("utf-8", "replace"),
    )


def _somebody(found: TrailEntry) -> str:
    if found.actor_id is not None:
        return f"account {found.actor_id}"
    return "somebody not signed in" if found.event.startswith("session.") else "the system"


def _role_label(role: str) -> str:
    return Role(role).label if role in Role.values else role


def _facts(facts: dict) -> Iterator[tuple[str, str]]:
    for name, value in facts.items():
        if text := text_of(name, value):
            yield label_of(name), text


def _changes(old: dict, new: dict) -> Iterator[Change]:
    for name in [*old, *(name for name in new if name not in old)]:
        before, after = text_of(name, old.get(name)), text_of(name, new.get(name))
        if before != after or (old.get(name) != new.get(name) and before):
            yield Change(label_of(name), before, after)
