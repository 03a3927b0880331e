"""The one way in: find out what a file is, and read it or say exactly why not."""

from __future__ import annotations

import hashlib

from spectra.core.errors import CoreError
from spectra.core.formats import delimited, jcamp, sniff
from spectra.core.types import ReadOptions, ReadResult


def read(data: bytes, options: ReadOptions = ReadOptions()) -> ReadResult:  # noqa: B008 - frozen, so safe as a default
    """Read one file.

    data : the bytes as uploaded; options : answers of a person to what the file leaves open.
    Never raises for bad input: `problem` says why the file as a whole was refused, a RefusedBlock why one block was. A
    problem with a `question` ("x_unit", "ordinate", "columns") means that the same bytes can be read once it is
    answered. Codes are ``reader.*`` and, from the gate behind the readers, ``trace.*``.
    """
    digest = hashlib.sha256(data).hexdigest()
    try:
        text = sniff.decode_text(data)
        blocks = jcamp.read_jcamp(text, options) if sniff.is_jcamp(text) else delimited.read_delimited(text, options)
    except CoreError as error:
        return ReadResult(sha256=digest, problem=error.problem)
    return ReadResult(sha256=digest, blocks=tuple(blocks))
