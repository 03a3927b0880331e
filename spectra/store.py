"""Files by content: written once under their SHA-256, never changed. Reading checks the name against the bytes."""

from __future__ import annotations

import hashlib
import os
import tempfile
from pathlib import Path

from django.conf import settings

from labsite.errors import DomainError, NotVisible


class Damaged(DomainError):
    """The stored bytes are not the ones that were stored."""

    status = 500


def digest_of(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


def path_of(sha256: str) -> Path:
    return Path(settings.FILES_DIR) / sha256[:2] / sha256


def put(data: bytes) -> str:
    """Store `data` and return its SHA-256 as hex. Storing the same bytes again does nothing."""
    sha256 = digest_of(data)
    path = path_of(sha256)
    if path.exists():
        return sha256
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=".incoming-")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o440)
        os.replace(temporary, path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise
    directory = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(directory)  # the name must survive a power cut as the bytes do
    finally:
        os.close(directory)
    return sha256


def get(sha256: str) -> bytes:
    """The bytes stored under `sha256`, checked. Raises `NotVisible` when they are gone, `Damaged` when they differ."""
    try:
        data = path_of(sha256).read_bytes()
    except FileNotFoundError:
        raise NotVisible("store.missing", "These bytes are not in the store.", sha256=sha256) from None
    if digest_of(data) != sha256:
        raise Damaged("store.damaged", "The stored bytes were altered: their SHA-256 no longer fits.", sha256=sha256)
    return data
