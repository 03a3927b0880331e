"""Signing takes two steps, because a password check is slow and must leave a trace when it fails.

`prove` checks the password outside any transaction, throttled, and records a failure in a transaction of its own.
`sign` runs inside the caller's unit of work, after the caller has locked and judged the record, and uses the proof up.
"""

from __future__ import annotations

import re
import secrets
from dataclasses import dataclass
from datetime import datetime, timedelta
from hashlib import sha256
from zoneinfo import ZoneInfo

from django.conf import settings
from django.http import HttpRequest
from django.utils import timezone

from labsite.accounts.models import User
from labsite.accounts.proving import prove_password
from labsite.errors import NotAllowed, NotPossible
from labsite.trail.canonical import clean_text
from labsite.trail.events import Event, Subject, in_words
from labsite.trail.record import in_unit_of_work, record, unit_of_work

from .digest import signature_digest
from .models import Meaning, Proof, Signature

PROOF_SECONDS = 120
PROOFS_KEPT_HOURS = 24
_SHA256_HEX = re.compile(r"[0-9a-f]{64}")


@dataclass(frozen=True)
class SigningProof:
    """Shows that `user_id` typed their password just now; good for one signature."""

    nonce: str
    user_id: int


def prove(request: HttpRequest, *, password: str) -> SigningProof:
    """Check the password of the signed-in person and return a proof for one signature.

    Raises BadInput (`signing.wrong_password`, field `password`), or NotAllowed (`signing.locked_out`) after too many
    failures; both are recorded. Never call it inside a unit of work: the check takes about half a second.
    """
    person = request.user
    if not person.is_authenticated:
        raise NotAllowed("signing.signed_out", "Sign in before you sign.")
    if person.must_change_password:
        raise NotAllowed("signing.temporary_password", "Choose your own password before you sign.")
    prove_password(request, password, event=Event.SIGNATURE_FAILED, what="signature", area="signing")
    nonce, now = secrets.token_urlsafe(32), timezone.now()
    with unit_of_work():
        Proof.objects.filter(expires_at__lt=now - timedelta(hours=PROOFS_KEPT_HOURS)).delete()
        Proof(nonce_hash=_hash(nonce), user=person, expires_at=now + timedelta(seconds=PROOF_SECONDS)).save(
            force_insert=True
        )
    return SigningProof(nonce, person.pk)


def sign(
    *,
    proof: SigningProof,
    by: User,
    kind: str,
    subject_id: str | int,
    content_hash: str,
    meaning: Meaning,
    label: str = "",
) -> Signature:
    """Write the signature of `by` over `content_hash` and record it; uses `proof` up.

    Call it inside a unit of work, after the record was locked and judged. Raises NotAllowed for another person's proof
    and NotPossible for one that was used or has expired.
    """
    if not in_unit_of_work():
        raise RuntimeError("a signature belongs inside the unit of work that writes what is signed")
    if proof.user_id != by.pk or not by.is_active:
        raise NotAllowed("signing.other_person", "A signature is made only by the person whose password was typed.")
    if not _SHA256_HEX.fullmatch(content_hash):
        raise ValueError("content_hash must be 64 hexadecimal digits")
    now = timezone.now()
    used = Proof.objects.filter(nonce_hash=_hash(proof.nonce), user_id=by.pk, used_at=None, expires_at__gt=now).update(
        used_at=now
    )
    if used != 1:
        raise NotPossible(
            "signing.proof_used",
            "The password was typed for another signature, or too long ago.",
            remedy="Type your password again.",
        )
    fields = {
        "kind": clean_text(kind),
        "subject_id": clean_text(str(subject_id)),
        "content_hash": content_hash,
        "meaning": Meaning(meaning).value,
        "signer_id": by.pk,
        "printed_name": by.printed_name,
        "signed_at": now,
        "laboratory_time_text": laboratory_time(now),
    }
    signature = Signature(**fields, digest=signature_digest(**fields))
    signature.save(force_insert=True)
    record(
        Event.SIGNATURE_MADE,
        by=by,
        subject=Subject(kind, subject_id, label or f"{in_words(kind).lower()} {subject_id}"),
        facts={
            "signature": signature.pk,
            "digest": signature.digest,
            "content_hash": content_hash,
            "meaning": signature.meaning,
        },
    )
    return signature


def laboratory_time(moment: datetime) -> str:
    """`moment` as a clock in the laboratory shows it, with its offset and zone."""
    local = moment.astimezone(ZoneInfo(settings.LABORATORY_TIME_ZONE))
    return f"{local.isoformat(sep=' ', timespec='seconds')} ({settings.LABORATORY_TIME_ZONE})"


def _hash(nonce: str) -> str:
    return sha256(nonce.encode()).hexdigest()
