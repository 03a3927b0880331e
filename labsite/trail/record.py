"""The one writer of the trail.

A service opens a unit of work, locks, judges, writes, and records. The unit collects the entries and appends them
last, under a short lock on the head of the trail, in the same transaction: either everything is written or nothing.
"""

from __future__ import annotations

import fcntl
import secrets
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from django.conf import settings
from django.db import connection, transaction
from django.utils import timezone

from . import canonical, chain, context
from .columns import derived_columns
from .events import Event, Subject
from .models import TrailEntry, TrailHead, TrailPersonal

if TYPE_CHECKING:
    from labsite.accounts.models import User

SALT_BYTES = 16
SUBJECT_ID_LIMIT = TrailEntry._meta.get_field("subject_id").max_length


@dataclass
class _Unit:
    pending: list[tuple[dict, dict]] = field(default_factory=list)  # (entry without its place, personal details)


_unit: ContextVar[_Unit | None] = ContextVar("bandledger_unit_of_work", default=None)


def in_unit_of_work() -> bool:
    return _unit.get() is not None


@contextmanager
def unit_of_work() -> Iterator[None]:
    """One transaction whose entries are appended last. Inside another unit of work it is a part of that one."""
    outer = _unit.get()
    if outer is not None:
        kept = len(outer.pending)
        try:
            with transaction.atomic():
                yield
        except BaseException:
            del outer.pending[kept:]  # the caller may catch this; what was undone must not be told
            raise
        return
    own_transaction = not connection.in_atomic_block  # false only inside the transaction of a test
    with _writers_turn() as give_up_turn, transaction.atomic(durable=True):
        if own_transaction:
            # First of the hooks: the messages sent on commit may take a while, and others are waiting to write.
            transaction.on_commit(give_up_turn)
        unit = _Unit()
        token = _unit.set(unit)
        try:
            yield
            if unit.pending:
                _append(unit.pending)
        finally:
            _unit.reset(token)


@contextmanager
def _writers_turn() -> Iterator[Callable[[], None]]:
    """On SQLite, wait in a queue before BEGIN: writers that meet inside the database starve one another."""
    if connection.vendor != "sqlite":
        yield lambda: None
        return
    with open(settings.WRITE_LOCK, "ab") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        yield lambda: fcntl.flock(lock, fcntl.LOCK_UN)


def record(
    event: Event,
    *,
    by: User | None,
    subject: Subject,
    facts: dict | None = None,
    old: dict | None = None,
    new: dict | None = None,
    reason: str = "",
    personal: dict[str, str] | None = None,
) -> None:
    """Say in the trail that `event` happened to `subject` by `by` (None: the system itself).

    `facts`, `old` and `new` hold text, whole numbers, yes/no, None, dates, lists and mappings; floats and decimals are
    written as text, anything else raises TypeError. Names of people go into `personal`, never into the others.
    Raises RuntimeError outside a unit of work.
    """
    unit = _unit.get()
    if unit is None:
        raise RuntimeError(f"{event} was recorded outside a unit of work")
    if not isinstance(event, Event):
        raise TypeError(f"{event!r} is not an Event")
    subject_id = canonical.clean_text(str(subject.id))
    if len(subject_id) > SUBJECT_ID_LIMIT:
        raise ValueError(f"the subject's id is longer than {SUBJECT_ID_LIMIT} characters")
    origin = context.current()
    actor = by if by is not None and by.pk is not None else None
    details = {key: canonical.clean_text(value) for key, value in (personal or {}).items()}
    if actor is not None:
        details |= {"username": actor.username, "printed_name": actor.printed_name}
    if origin.address:
        details["address"] = canonical.clean_text(origin.address)
    entry = {
        "event": event.value,
        "actor": {"id": actor.pk if actor else None, "roles": sorted(actor.roles) if actor else []},
        "subject": {
            "kind": canonical.clean_text(subject.kind),
            "id": subject_id,
            "label": canonical.clean_text(subject.label),
        },
        "facts": canonical.plain_mapping(facts or {}),
        "old": None if old is None else canonical.plain_mapping(old),
        "new": None if new is None else canonical.plain_mapping(new),
        "reason": canonical.clean_text(reason),
        "request": canonical.clean_text(origin.request_id),
    }
    unit.pending.append((entry, details))


def _append(pending: list[tuple[dict, dict]]) -> None:
    head = _locked_head()
    seq, previous = head.seq, head.entry_hash
    entries: list[TrailEntry] = []
    personals: list[TrailPersonal] = []
    for entry, details in pending:
        seq += 1
        salt, detail_bytes = secrets.token_bytes(SALT_BYTES), canonical.canonical_bytes(details)
        whole = {
            "format": canonical.FORMAT,
            "seq": seq,
            "at": canonical.utc_text(timezone.now()),
            **entry,
            "personal": chain.personal_hash(salt, detail_bytes) if details else None,
            "prev": previous,
        }
        stored = canonical.canonical_bytes(whole)
        previous = chain.entry_hash(stored)
        entries.append(TrailEntry(canonical=stored, entry_hash=previous, **derived_columns(whole)))
        if details:
            personals.append(TrailPersonal(entry_id=seq, salt=salt, details=detail_bytes))
    TrailEntry.objects.bulk_create(entries)
    TrailPersonal.objects.bulk_create(personals)
    TrailHead.objects.filter(pk=TrailHead.ONLY).update(seq=seq, entry_hash=previous)


def _locked_head() -> TrailHead:
    """The head row, locked until the end of the transaction. It is made before the very first entry, and only then."""
    heads = TrailHead.objects.select_for_update()
    head = heads.filter(pk=TrailHead.ONLY).first()
    if head is not None:
        return head
    first = TrailHead(pk=TrailHead.ONLY, seq=0, entry_hash=chain.GENESIS)
    TrailHead.objects.bulk_create([first], ignore_conflicts=True)  # another writer may be making it now
    head = heads.get(pk=TrailHead.ONLY)
    # Asked only now: another writer's first entries may have been committed since the head was looked for.
    if head.seq == 0 and TrailEntry.objects.exists():
        raise RuntimeError("The head of the trail is missing although entries exist: run `manage.py verify_trail`.")
    return head
