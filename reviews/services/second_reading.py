"""What a decision stands on, in one hash that the trail keeps: the verdict with its words, and all that was read.

The signature covers what the analyst proposed. What the reviewer opened, judged and wrote is bound by this hash, which
stands in the entry of the decision.
"""

from __future__ import annotations

import hashlib

from labsite.trail import canonical
from reviews.models import Decision, InterpretationVersion, ReviewRead, Withdrawal

FORMAT = 1
READ_COLUMNS = (
    "opened_at judgement judged_at comment answer answered_by_id answered_at settlement settled_at reviewer_id"
).split()


def digest_of_decision(decision: Decision) -> str:
    """SHA-256 of the RFC 8785 text of the decision and of every reading of its version."""
    return _hash(_decision(decision))


def digest_of_withdrawal(withdrawal: Withdrawal) -> str:
    """The same for a withdrawal, over the decision that it undoes as well."""
    document = {
        **_decision(withdrawal.version.decision),
        "withdrawn_by": withdrawal.by_id,
        "withdrawn_at": withdrawal.at,
        "withdrawal_reason": withdrawal.reason,
    }
    return _hash(document)


def _decision(decision: Decision) -> dict[str, object]:
    return {
        "format": FORMAT,
        "content_hash": decision.version.content_hash,
        "verdict": decision.verdict,
        "by": decision.by_id,
        "at": decision.at,
        "comment": decision.comment,
        "reasons": decision.reasons,
        "reads": _reads(decision.version),
    }


def _reads(version: InterpretationVersion) -> list[dict[str, object]]:
    rows = ReviewRead.objects.filter(point__version=version).select_related("point").order_by("pk")
    found = [{"point": row.point.key} | {name: getattr(row, name) for name in READ_COLUMNS} for row in rows]
    return sorted(found, key=lambda read: (read["point"], read["reviewer_id"]))


def _hash(document: dict[str, object]) -> str:
    return hashlib.sha256(canonical.canonical_bytes(canonical.plain_mapping(document))).hexdigest()
