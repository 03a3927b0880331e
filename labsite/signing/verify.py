"""Are the signatures the ones that were made? Each is compared with its digest and with the trail, both ways."""

from __future__ import annotations

import json
from collections.abc import Iterator

from django.db.models import Max

from labsite.trail.events import Event
from labsite.trail.models import TrailEntry
from labsite.trail.verify import CHUNK, Damage, stored_bytes

from .digest import signature_digest
from .models import Signature


def signature_damages() -> Iterator[Damage]:
    # A signature and its entry are written together. Whatever was entered before the signatures are read must be among
    # them, and whatever is among them must be in the entries that are read afterwards.
    entered_before = TrailEntry.objects.aggregate(newest=Max("seq"))["newest"] or 0
    known = {}
    for signature in Signature.objects.order_by("pk").iterator(chunk_size=CHUNK):
        known[signature.pk] = (signature.digest, signature.content_hash)
        if _digest(signature) != signature.digest:
            yield Damage(f"signature {signature.pk}", "it was changed: it no longer gives the digest it was made with")
    recorded = set()
    entries = TrailEntry.objects.filter(event=Event.SIGNATURE_MADE).order_by("seq").values_list("seq", "canonical")
    for seq, stored in entries.iterator(chunk_size=CHUNK):
        try:
            facts = json.loads(stored_bytes(stored) or b"")["facts"]
            pk, promised = facts["signature"], (facts["digest"], facts["content_hash"])
        except (ValueError, KeyError, TypeError, RecursionError):
            continue  # the chain reports an entry that cannot be read
        recorded.add(pk)
        if pk not in known:
            if seq <= entered_before:
                yield Damage(f"signature {pk}", f"it was removed; entry {seq} says that it was made")
        elif known[pk] != promised:
            yield Damage(f"signature {pk}", f"it is not the one that entry {seq} recorded")
    for pk in sorted(set(known) - recorded):
        yield Damage(f"signature {pk}", "no entry of the trail says that it was made")


def _digest(signature: Signature) -> str:
    return signature_digest(
        kind=signature.kind,
        subject_id=signature.subject_id,
        content_hash=signature.content_hash,
        meaning=signature.meaning,
        signer_id=signature.signer_id,
        printed_name=signature.printed_name,
        signed_at=signature.signed_at,
        laboratory_time_text=signature.laboratory_time_text,
    )
