"""What a signature's digest covers. Pure."""

from __future__ import annotations

from datetime import datetime
from hashlib import sha256

from labsite.trail.canonical import canonical_bytes, utc_text

FORMAT = 1


def signature_digest(
    *,
    kind: str,
    subject_id: str,
    content_hash: str,
    meaning: str,
    signer_id: int,
    printed_name: str,
    signed_at: datetime,
    laboratory_time_text: str,
) -> str:
    """SHA-256 (hex) over the RFC 8785 text of a signature's fields."""
    return sha256(
        canonical_bytes(
            {
                "format": FORMAT,
                "kind": kind,
                "subject_id": subject_id,
                "content_hash": content_hash,
                "meaning": str(meaning),
                "signer": signer_id,
                "printed_name": printed_name,
                "signed_at": utc_text(signed_at),
                "laboratory_time": laboratory_time_text,
            }
        )
    ).hexdigest()
