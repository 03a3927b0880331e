"""From the text of a JCAMP-DX data table to its numbers: value, form and line of each."""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal

import numpy as np

from spectra.core.errors import CoreError
from spectra.core.formats.limits import MAX_LINES

# Classes of characters; everything from SIGN upwards always begins a new number.
BAD, BLANK, NEWLINE, DIGIT, DOT, EXPONENT, EXPONENT_SIGN = range(7)
SIGN, SQZ_PLUS, SQZ_MINUS, DIF_PLUS, DIF_MINUS, DUP = range(7, 13)
PLAIN, ABSOLUTE, DIFFERENCE, COUNT = range(4)  # kinds of numbers

CHUNK_CHARACTERS = 1 << 17  # tokens are made piecewise, so that the work arrays stay small and near the processor
MOST_WHOLE_FIGURES = 15  # whole numbers up to so many figures are summed exactly


def _character_tables() -> tuple[bytes, bytes]:
    """For each byte its class, and the figure that it stands for."""
    classes = np.full(256, BAD, np.uint8)
    figures = np.full(256, ord(" "), np.uint8)
    for text, kind, first in (
        (" \t\f\v", BLANK, None),
        ("\n", NEWLINE, None),
        ("0123456789", DIGIT, 0),
        ("@ABCDEFGHI", SQZ_PLUS, 0),
        ("abcdefghi", SQZ_MINUS, 1),
        ("%JKLMNOPQR", DIF_PLUS, 0),
        ("jklmnopqr", DIF_MINUS, 1),
        ("STUVWXYZs", DUP, 1),
    ):
        for offset, character in enumerate(text):
            classes[ord(character)] = kind
            if first is not None:
                figures[ord(character)] = ord("0") + first + offset
    classes[ord(".")], figures[ord(".")] = DOT, ord(".")
    for sign in "+-":
        classes[ord(sign)], figures[ord(sign)] = SIGN, ord(sign)
    return classes.tobytes(), figures.tobytes()


CLASSES, FIGURES = _character_tables()
KIND_OF_CLASS = np.zeros(16, np.uint8)
KIND_OF_CLASS[[SQZ_PLUS, SQZ_MINUS]] = ABSOLUTE
KIND_OF_CLASS[[DIF_PLUS, DIF_MINUS]] = DIFFERENCE
KIND_OF_CLASS[DUP] = COUNT


def _forbidden_neighbours() -> np.ndarray:
    """Boolean table (16 x 16, flat): which class must not follow which."""
    forbidden = np.zeros((16, 16), bool)
    forbidden[SIGN] = True
    forbidden[SIGN, [DIGIT, DOT]] = False
    forbidden[EXPONENT] = True
    forbidden[EXPONENT, [DIGIT, EXPONENT_SIGN]] = False
    forbidden[EXPONENT_SIGN] = True
    forbidden[EXPONENT_SIGN, DIGIT] = False
    forbidden[[DOT, DUP], DOT] = True
    forbidden[[BLANK, NEWLINE, SIGN, EXPONENT, EXPONENT_SIGN, DUP], EXPONENT] = True
    return forbidden.ravel()


FORBIDDEN = _forbidden_neighbours()


@dataclass(frozen=True)
class Tokens:
    value: np.ndarray  # float64, shape (tokens,)
    kind: np.ndarray  # uint8, shape (tokens,)
    line: np.ndarray  # int64, shape (tokens,), 1-based line of the file
    opens_line: np.ndarray  # bool, shape (tokens,)
    label_unit: np.ndarray  # float64, shape (lines,)
    packed: bool  # a sign stands in place of a blank somewhere


def tokenise(text: str, first_line: int, points_left: int) -> Tokens:
    data = text.encode("ascii", "replace")  # what is not ASCII becomes "?" and is refused with its line
    exponents_only = _e_is_always_an_exponent(data)
    parts, line, start, tokens = [], first_line, 0, 0
    while start < len(data):
        end = data.find(b"\n", min(start + CHUNK_CHARACTERS, len(data) - 1)) + 1 or len(data)
        chunk = data[start:end]
        parts.append(_chunk_tokens(chunk, line, exponents_only))
        tokens += len(parts[-1].value)
        if tokens > 2 * points_left + MAX_LINES:  # an ordinate and its count for each point, an abscissa for each line
            raise too_many_points(points_left, line)
        line += chunk.count(b"\n")
        start = end
    if not parts:
        empty = np.empty(0)
        return Tokens(empty, empty.astype(np.uint8), empty.astype(np.int64), empty.astype(bool), empty, False)
    if len(parts) == 1:
        return parts[0]
    columns = ("value", "kind", "line", "opens_line", "label_unit")
    return Tokens(
        *(np.concatenate([getattr(part, name) for part in parts]) for name in columns),
        any(part.packed for part in parts),
    )


def _e_is_always_an_exponent(data: bytes) -> bool:
    """Whether E can only mean "times ten to the": the table has no other letter, and blanks part its numbers.

    Elsewhere E is an exponent only before a sign, because it is also the squeezed figure 5 (``4400E839``: 4400 and
    5839).
    """
    if b"E" not in data and b"e" not in data:
        return False
    letters = data.translate(None, delete=b"0123456789+-. \t\f\v\n")
    if letters.strip(b"Ee"):
        return False
    for row in data.split(b"\n"):
        words = row.split()
        if len(words) == 1 or any(word.upper().count(b"E") > 1 for word in words):
            return False
    return True


def _chunk_tokens(chunk: bytes, first_line: int, exponents_only: bool) -> Tokens:
    raw = np.frombuffer(chunk, np.uint8)
    classes = np.frombuffer(bytearray(chunk.translate(CLASSES)), np.uint8)
    figures = np.frombuffer(bytearray(chunk.translate(FIGURES)), np.uint8)
    _mark_exponents(raw, classes, figures, exponents_only)
    before = np.empty_like(classes)
    before[0] = NEWLINE
    before[1:] = classes[:-1]

    wrong = FORBIDDEN[before * np.uint8(16) + classes] | (classes == BAD)
    if wrong.any():
        _refuse_character(chunk, int(np.argmax(wrong)), first_line)
    if classes[-1] in (SIGN, EXPONENT, EXPONENT_SIGN):
        _refuse_character(chunk, len(chunk) - 1, first_line)
    begins = (classes >= SIGN) | ((before <= NEWLINE) & (classes >= DIGIT))
    starts = np.flatnonzero(begins)
    if not len(starts):
        empty = np.empty(0)
        return Tokens(empty, empty.astype(np.uint8), empty.astype(np.int64), empty.astype(bool), empty, False)
    _check_points(chunk, classes, starts, first_line)

    ends = _ends(classes, begins)
    start_class = classes[starts]
    value = _values(chunk, classes, figures, starts, ends, begins)
    np.negative(value, out=value, where=(start_class == SQZ_MINUS) | (start_class == DIF_MINUS))
    if not np.isfinite(value).all():
        place = int(starts[int(np.argmax(~np.isfinite(value)))])
        raise CoreError(
            "reader.bad_number",
            "A number in the data table is too large.",
            line=first_line + chunk[:place].count(b"\n"),
        )

    per_line = np.diff(np.searchsorted(starts, np.flatnonzero(classes == NEWLINE)), prepend=0, append=len(starts))
    row = np.repeat(np.arange(len(per_line)), per_line)
    opens = np.empty(len(starts), bool)
    opens[0] = True
    opens[1:] = row[1:] != row[:-1]
    label_unit = _last_figure_units(chunk, classes, starts[opens], ends[opens])
    signs = starts[(start_class == SIGN) & ~opens]
    packed = bool((before[signs] >= DIGIT).any() or (raw[signs] == ord("+")).any())
    return Tokens(value, KIND_OF_CLASS[start_class], row + first_line, opens, label_unit, packed)


def _mark_exponents(raw: np.ndarray, classes: np.ndarray, figures: np.ndarray, exponents_only: bool) -> None:
    letters = np.flatnonzero((raw == ord("E")) | (raw == ord("e")))
    letters = letters[letters < len(raw) - 1]
    if not len(letters):
        return
    signed = (
        (classes[letters + 1] == SIGN)
        & ((classes[letters - 1] == DIGIT) | (classes[letters - 1] == DOT))
        & (letters > 0)
    )
    exponents = letters if exponents_only else letters[signed]
    classes[exponents] = EXPONENT
    figures[exponents] = ord("e")
    classes[letters[signed] + 1] = EXPONENT_SIGN


def _check_points(chunk: bytes, classes: np.ndarray, starts: np.ndarray, first_line: int) -> None:
    """Refuse two decimal points or exponents in a number, a point after its exponent, and a point without a figure."""
    points = np.flatnonzero(classes == DOT)
    if len(points):
        token = np.searchsorted(starts, points, "right")
        doubled = np.flatnonzero(token[1:] == token[:-1])
        if len(doubled):
            _refuse_character(chunk, int(points[doubled[0] + 1]), first_line)
        padded = np.concatenate(([NEWLINE], classes, [NEWLINE]))
        previous, following = padded[points], padded[points + 2]
        lonely = (following != DIGIT) & ((previous <= NEWLINE) | (previous == SIGN))
        if lonely.any():
            _refuse_character(chunk, int(points[int(np.argmax(lonely))]), first_line)
    exponents = np.flatnonzero(classes == EXPONENT)
    if len(exponents):
        token = np.searchsorted(starts, exponents, "right")
        doubled = np.flatnonzero(token[1:] == token[:-1])
        late = np.flatnonzero(np.isin(np.searchsorted(starts, points, "right"), token)) if len(points) else []
        for place in doubled[:1]:
            _refuse_character(chunk, int(exponents[place + 1]), first_line)
        for place in late:
            same = exponents[token == np.searchsorted(starts, points[place], "right")]
            if points[place] > same[0]:
                _refuse_character(chunk, int(points[place]), first_line)


def _ends(classes: np.ndarray, begins: np.ndarray) -> np.ndarray:
    """The place behind the last character of each number."""
    goes_on = np.zeros(len(classes), bool)
    goes_on[:-1] = (classes[1:] >= DIGIT) & ~begins[1:]
    return np.flatnonzero((classes >= DIGIT) & ~goes_on) + 1


def _values(
    chunk: bytes, classes: np.ndarray, figures: np.ndarray, starts: np.ndarray, ends: np.ndarray, begins: np.ndarray
) -> np.ndarray:
    """The numbers, float64, shape (tokens,); a minus that a letter carries is not yet applied."""
    signed = classes[starts] == SIGN
    places = ends - starts - signed
    other = places > MOST_WHOLE_FIGURES
    marks = np.flatnonzero((classes == DOT) | (classes == EXPONENT))
    other[np.searchsorted(starts, marks, "right") - 1] = True
    if np.count_nonzero(other) > len(starts) // 4:
        # A blank before each number parts what the packed forms write without one; the letters became their figures.
        spaced = np.full(len(figures) + len(starts), ord(" "), np.uint8)
        spaced[np.arange(len(figures), dtype=np.int32) + np.cumsum(begins, dtype=np.int32)] = figures
        return np.fromstring(spaced.tobytes(), sep=" ")
    # Whole numbers are summed figure by figure from the right, all numbers at once; each partial sum is exact in
    # float64.
    value = np.zeros(len(starts))
    places[other] = 0
    last = ends - 1
    for place in range(int(places.max(initial=0))):
        present = np.flatnonzero(places > place)
        value[present] += (figures[last[present] - place] - np.uint8(ord("0"))) * 10.0**place
    for index in np.flatnonzero(other):
        value[index] = float(figures[starts[index] : ends[index]].tobytes())
        signed[index] = False
    np.negative(value, out=value, where=signed & (figures[starts] == ord("-")))
    return value


def _last_figure_units(chunk: bytes, classes: np.ndarray, begin: np.ndarray, end: np.ndarray) -> np.ndarray:
    """One unit of the last printed figure of each number, shape (numbers,); 1 for whole ones, 0.01 for ``574.93``."""
    unit = np.ones(len(begin))
    points = np.flatnonzero(classes == DOT)
    if len(points):
        place = np.minimum(np.searchsorted(points, begin), len(points) - 1)
        inside = (points[place] >= begin) & (points[place] < end)
        unit[inside] = 10.0 ** -(end - points[place] - 1)[inside]
    exponents = np.flatnonzero(classes == EXPONENT)
    if len(exponents):
        place = np.minimum(np.searchsorted(exponents, begin), len(exponents) - 1)
        for index in np.flatnonzero((exponents[place] >= begin) & (exponents[place] < end)):
            written = Decimal(chunk[begin[index] : end[index]].decode("ascii"))
            unit[index] = 10.0 ** min(max(int(written.as_tuple().exponent), -300), 300)
    return unit


def _refuse_character(chunk: bytes, place: int, first_line: int) -> None:
    line = first_line + chunk[:place].count(b"\n")
    character = chr(chunk[place])
    if character == "?":
        raise CoreError(
            "reader.missing_ordinate",
            "The data table holds a question mark or another sign that is no number.",
            line=line,
            remedy="A spectrum with missing ordinates is not read; export it again.",
        )
    if character == ",":
        raise CoreError(
            "reader.decimal_comma",
            "The data table holds a comma; its numbers need a decimal point.",
            line=line,
            remedy="Export with a decimal point.",
        )
    raise CoreError(
        "reader.bad_character", f"The data table holds {character!r} where a number should go on.", line=line
    )


def too_many_points(points_left: int, line: int) -> CoreError:
    return CoreError("reader.too_many_points", f"The data table asks for more than {points_left} points.", line=line)
