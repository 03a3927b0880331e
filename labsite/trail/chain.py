"""How entries are linked: each holds the hash of the one before it. Pure: bytes in, text out."""

from __future__ import annotations

from hashlib import sha256

from .merkle import leaf_hash

GENESIS = "0" * 64  # what the first entry names as the one before it


def entry_hash(canonical: bytes) -> str:
    """The hash of an entry, hex: the RFC 9162 leaf hash of its canonical bytes."""
    return leaf_hash(canonical).hex()


def personal_hash(salt: bytes, details: bytes) -> str:
    """What an entry says about its personal details, hex; without the salt nobody can guess them from it."""
    return sha256(salt + details).hexdigest()
