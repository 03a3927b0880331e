"""From bytes to clean lines of text: size, encoding and the kind of file, each refusal with its own code."""

from __future__ import annotations

import re

from spectra.core.errors import CoreError
from spectra.core.formats.limits import MAX_FILE_BYTES, MAX_LINE_CHARACTERS, MAX_LINES

_UTF8_MARK = b"\xef\xbb\xbf"
_WIDE_MARKS = (b"\xff\xfe", b"\xfe\xff", b"\x00\x00\xfe\xff")
_CONTROL = bytes(code for code in range(32) if code not in b"\t\n\r\f\v\x1a") + b"\x7f"
_MOST_CONTROL_SHARE = 0.001  # a stray NUL in a header is everyday; more than this is no text
_JCAMP_LABEL = re.compile(
    r"^[ \t]*##[ \t]*(?:TITLE|JCAMP[-_ ]?(?:DX|CS)|DATA[-_ ]?TYPE|XYDATA|XYPOINTS)[ \t]*=", re.IGNORECASE | re.MULTILINE
)
_SNIFFED_CHARACTERS = 65_536


def decode_text(data: bytes) -> str:
    r"""The text of a file, its lines ended by ``\n`` alone.

    Reads UTF-8 (with or without its mark) and, where the bytes are no UTF-8, Latin-1. Everything from a closing
    Control-Z on is dropped. Raises CoreError with ``reader.empty``, ``reader.too_large``, ``reader.too_many_lines``,
    ``reader.wide_encoding``, ``reader.binary`` or ``reader.line_too_long``.
    """
    if len(data) > MAX_FILE_BYTES:
        raise CoreError(
            "reader.too_large",
            f"The file has {len(data)} bytes; at most {MAX_FILE_BYTES} are read.",
            remedy="Export one spectrum for each file.",
        )
    if not data.strip(b" \t\r\n\f\v\x00\x1a"):
        raise CoreError("reader.empty", "The file is empty.", line=1, remedy="Export the spectrum again.")
    _refuse_wide(data)
    data = data.removeprefix(_UTF8_MARK)
    controls = len(data) - len(data.translate(None, delete=_CONTROL))
    if controls > max(4, _MOST_CONTROL_SHARE * len(data)):
        first = re.search(b"[" + re.escape(_CONTROL) + b"]", data)
        raise CoreError(
            "reader.binary",
            "The file is not text.",
            line=data[: first.start()].count(b"\n") + 1 if first else 1,
            remedy="Export the spectrum as JCAMP-DX or as delimited text; the own formats of instruments are not read.",
        )
    data = data.rstrip(b" \t\r\n\x00").removesuffix(b"\x1a") + _end_of_last_line(data)
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    _refuse_lines(data)
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError:
        return data.decode("latin-1")


def is_jcamp(text: str) -> bool:
    """Whether a line near the beginning is a labelled record of JCAMP-DX."""
    return _JCAMP_LABEL.search(text[:_SNIFFED_CHARACTERS]) is not None


def _end_of_last_line(data: bytes) -> bytes:
    """A file whose last line was never ended stays so: a cut through a number must remain visible."""
    return b"\n" if data.rstrip(b" \t\x00\x1a").endswith((b"\n", b"\r")) else b""


def _refuse_wide(data: bytes) -> None:
    head = data[:4096]
    alternating = len(head) >= 8 and max(head[0::2].count(0), head[1::2].count(0)) > 0.4 * len(head) / 2
    if data.startswith(_WIDE_MARKS) or alternating:
        raise CoreError(
            "reader.wide_encoding",
            "The file is written in UTF-16 or UTF-32.",
            line=1,
            remedy="Save it as UTF-8 or plain ASCII text.",
        )


def _refuse_lines(data: bytes) -> None:
    lines = data.count(b"\n") + 1
    if lines > MAX_LINES:
        raise CoreError(
            "reader.too_many_lines", f"The file has {lines} lines; at most {MAX_LINES} are read.", line=MAX_LINES + 1
        )
    start, line = 0, 1
    while len(data) - start > MAX_LINE_CHARACTERS:
        # The last line end within reach: everything up to it is short enough.
        end = data.rfind(b"\n", start, start + MAX_LINE_CHARACTERS + 1)
        if end < 0:
            raise CoreError(
                "reader.line_too_long", f"A line has more than {MAX_LINE_CHARACTERS} characters.", line=line
            )
        line += data.count(b"\n", start, end + 1)
        start = end + 1
