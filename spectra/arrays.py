"""Between bytes and arrays: what is hashed, what is stored, what is read back. All little-endian, sizes stated."""

from __future__ import annotations

import hashlib
import json
import struct
from collections.abc import Mapping

import numpy as np

from spectra.core.types import SpectrumBlock

MAGIC = b"BLCURVES1\n"


def block_digest(block: SpectrumBlock) -> str:
    """SHA-256 over both arrays as float64 little-endian, wavenumbers first."""
    digest = hashlib.sha256()
    digest.update(np.ascontiguousarray(block.x_cm1, dtype="<f8").tobytes())
    digest.update(np.ascontiguousarray(block.y, dtype="<f8").tobytes())
    return digest.hexdigest()


def pack_curves(curves: Mapping[str, np.ndarray]) -> bytes:
    """The named one-dimensional arrays as one block of float32 values behind a JSON header."""
    names = sorted(curves)
    header = json.dumps([[name, int(len(curves[name]))] for name in names]).encode("ascii")
    parts = [MAGIC, struct.pack("<I", len(header)), header]
    parts += [np.ascontiguousarray(curves[name], dtype="<f4").tobytes() for name in names]
    return b"".join(parts)


def unpack_curves(data: bytes) -> dict[str, np.ndarray]:
    """What `pack_curves` packed, as float32 arrays. Raises ValueError for anything else."""
    if not data.startswith(MAGIC):
        raise ValueError("These bytes are not stored curves.")
    start = len(MAGIC) + 4
    (size,) = struct.unpack("<I", data[len(MAGIC) : start])
    header = json.loads(data[start : start + size])
    offset = start + size
    curves = {}
    for name, length in header:
        curves[name] = np.frombuffer(data, dtype="<f4", count=length, offset=offset)
        offset += 4 * length
    return curves
