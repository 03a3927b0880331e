"""Still drawings as inline SVG: a structure from its coordinates, a spectrum from its points. No request, no rows."""

from __future__ import annotations

import math

from django import template
from django.utils.html import format_html, format_html_join
from django.utils.safestring import SafeString

from spectra.core.structure import Bond, Structure
from spectra.core.types import Ordinate, SpectrumBlock

register = template.Library()

BOND_PX = 30.0
UNITS_PER_BOND = 1.5
MARGIN_PX = 34.0
PARTS_GAP_PX = 64.0
LINE_GAP_PX = 4.2
LETTER_PX = 9.5  # half a capital letter with its surrounding room: bonds stop there

PLOT_WIDTH, PLOT_HEIGHT = 440, 196
LEFT, RIGHT, TOP, BOTTOM = 50, 12, 10, 44
FINGERPRINT_BELOW_CM1 = 1500.0
ORDINATE_WORDS = {
    Ordinate.ABSORBANCE: "absorbance",
    Ordinate.TRANSMITTANCE: "transmittance (fraction)",
    Ordinate.PERCENT_TRANSMITTANCE: "transmittance / %",
    Ordinate.REFLECTANCE: "reflectance (fraction)",
    Ordinate.ABSORPTIVITY: "absorptivity, as in the file",
}

Point = tuple[float, float]


@register.simple_tag
def structure_drawing(structure: Structure | None, name: str = "") -> SafeString | str:
    """The skeleton of a structure: a carbon at each corner, other atoms by symbol, open ends of a unit barred."""
    if structure is None:
        return ""
    places = _places(structure)
    labels = [_label(structure, index) for index in range(len(structure.atoms))]
    lines: list[tuple[Point, Point, str]] = []
    for bond in structure.bonds:
        lines += _bond_lines(structure, bond, places, labels)
    width = max(x for x, _ in places) + MARGIN_PX
    height = max(y for _, y in places) + MARGIN_PX
    drawn = format_html_join(
        "",
        '<line x1="{}" y1="{}" x2="{}" y2="{}"{}/>',
        (
            (*map(_px, (*start, *end)), format_html(' stroke-dasharray="{}"', dash) if dash else "")
            for start, end, dash in lines
        ),
    )
    letters = format_html_join(
        "",
        '<text x="{}" y="{}" text-anchor="{}">{}</text>',
        (
            (_px(x + {"start": -6.0, "end": 6.0}.get(anchor, 0.0)), _px(y + 5.3), anchor, _spans(pieces))
            for (x, y), (pieces, anchor) in zip(places, labels, strict=True)
            if pieces
        ),
    )
    return format_html(
        '<svg class="structure" role="img" aria-label="Structure{}, {}" viewBox="0 0 {} {}" width="{}"'
        ' height="{}"><g fill="none" stroke="currentColor" stroke-width="1.6" stroke-linecap="round">{}</g>'
        '<g fill="currentColor" font-size="15">{}</g></svg>',
        f" of {name}" if name else "",
        structure.formula,
        *map(_px, (width, height, width, height)),
        drawn,
        letters,
    )


def _px(value: float) -> str:
    return f"{value:.1f}"


def _places(structure: Structure) -> list[Point]:
    """Where each atom stands, in pixels; the parts of a salt or mixture stand side by side."""
    scale = BOND_PX / UNITS_PER_BOND
    places = [(0.0, 0.0)] * len(structure.atoms)
    left = MARGIN_PX
    parts = _parts(structure)
    tallest = max(_height(structure, part) for part in parts)
    for part in parts:
        atoms = [structure.atoms[index] for index in part]
        first, top = min(atom.x for atom in atoms), max(atom.y for atom in atoms)
        down = MARGIN_PX + (tallest - _height(structure, part)) * scale / 2
        for index, atom in zip(part, atoms, strict=True):
            places[index] = (left + (atom.x - first) * scale, down + (top - atom.y) * scale)
        left = max(places[index][0] for index in part) + PARTS_GAP_PX
    return places


def _height(structure: Structure, part: list[int]) -> float:
    heights = [structure.atoms[index].y for index in part]
    return max(heights) - min(heights)


def _parts(structure: Structure) -> list[list[int]]:
    """The atoms of each separate part, in the order of their first atoms."""
    part_of = list(range(len(structure.atoms)))
    for bond in structure.bonds:
        old, new = sorted((part_of[bond.start], part_of[bond.end]), reverse=True)
        part_of = [new if part == old else part for part in part_of]
    return [[i for i, part in enumerate(part_of) if part == first] for first in sorted(set(part_of))]


def _neighbours(structure: Structure, index: int) -> list[int]:
    ends = ((bond.start, bond.end) for bond in structure.bonds if index in (bond.start, bond.end))
    return [end if start == index else start for start, end in ends]


def _label(structure: Structure, index: int) -> tuple[list[tuple[str, str]], str]:
    """(pieces of text with their place: plain, sub or super; text anchor). A carbon of the skeleton has none."""
    atom = structure.atoms[index]
    around = _neighbours(structure, index)
    if atom.symbol == "*" or (atom.symbol == "C" and around and not atom.charge):
        return [], "middle"
    hydrogens: list[tuple[str, str]] = []
    if atom.hydrogens:
        hydrogens = [("H", "plain")] + ([(str(atom.hydrogens), "sub")] if atom.hydrogens > 1 else [])
    charge: list[tuple[str, str]] = []
    if atom.charge:
        number = str(abs(atom.charge)) if abs(atom.charge) > 1 else ""
        charge = [(number + ("+" if atom.charge > 0 else "−"), "super")]
    lean = sum(structure.atoms[other].x - atom.x for other in around)
    symbol = [(atom.symbol, "plain")]
    if hydrogens and lean > 0.3:
        return [*hydrogens, *symbol, *charge], "end"
    return [*symbol, *hydrogens, *charge], "start" if hydrogens or charge else "middle"


def _spans(pieces: list[tuple[str, str]]) -> SafeString:
    """Sub- and superscripts by shifting the line, and back again for what follows."""
    shifts, down = [], 0
    for text, kind in pieces:
        wanted = {"sub": 4, "super": -6}.get(kind, 0)
        shifts.append((wanted - down, 11 if kind != "plain" else 15, text))
        down = wanted
    return format_html_join("", '<tspan dy="{}" font-size="{}">{}</tspan>', shifts)


def _bond_lines(
    structure: Structure, bond: Bond, places: list[Point], labels: list[tuple[list[tuple[str, str]], str]]
) -> list[tuple[Point, Point, str]]:
    """The strokes of one bond: (start, end, dash pattern or empty)."""
    start, end = places[bond.start], places[bond.end]
    length = math.dist(start, end) or 1.0
    along = ((end[0] - start[0]) / length, (end[1] - start[1]) / length)
    across = (-along[1], along[0])
    start = _moved(start, along, LETTER_PX if labels[bond.start][0] else 0.0)
    end = _moved(end, along, -LETTER_PX if labels[bond.end][0] else 0.0)
    lines = [(start, end, "")]
    for index, tip, inward in ((bond.start, start, 1.0), (bond.end, end, -1.0)):
        if structure.atoms[index].symbol == "*":
            bar = _moved(tip, along, inward * length * 0.45)
            lines.append((_moved(bar, across, 11.0), _moved(bar, across, -11.0), ""))
    if bond.order == 1.0:
        return lines
    if bond.order == 3.0:
        return [*lines, *(_beside(start, end, along, across, side * LINE_GAP_PX, 0.0, "") for side in (1.0, -1.0))]
    side = _crowded_side(structure, bond, places, across)
    if bond.order == 2.0 and side == 0.0:
        half = LINE_GAP_PX / 2
        return [*lines[1:], *(_beside(start, end, along, across, sign * half, 0.0, "") for sign in (1.0, -1.0))]
    dash = "3.2 3" if bond.order == 1.5 else ""
    return [*lines, _beside(start, end, along, across, (side or 1.0) * LINE_GAP_PX, 3.5, dash)]


def _moved(point: Point, direction: Point, distance: float) -> Point:
    return point[0] + direction[0] * distance, point[1] + direction[1] * distance


def _beside(
    start: Point, end: Point, along: Point, across: Point, offset: float, shorter: float, dash: str
) -> tuple[Point, Point, str]:
    return (
        _moved(_moved(start, across, offset), along, shorter),
        _moved(_moved(end, across, offset), along, -shorter),
        dash,
    )


def _crowded_side(structure: Structure, bond: Bond, places: list[Point], across: Point) -> float:
    """The side (1 or -1) on which the neighbours lie, where a ring is too; 0 when neither, or at the end of a chain."""
    ends = (bond.start, bond.end)
    others = [[n for n in _neighbours(structure, index) if n not in ends] for index in ends]
    if bond.order == 2.0 and not all(others):
        return 0.0
    middle = [(a + b) / 2 for a, b in zip(places[bond.start], places[bond.end], strict=True)]
    around = [places[n] for side in others for n in side]
    lean = sum((x - middle[0]) * across[0] + (y - middle[1]) * across[1] for x, y in around)
    return math.copysign(1.0, lean) if abs(lean) > 1.0 else 0.0


@register.simple_tag
def spectrum_drawing(block: SpectrumBlock | None) -> SafeString | str:
    """A spectrum as it stands in its file, nothing corrected; wavenumber falls to the right."""
    if block is None:
        return ""
    low_cm1, high_cm1 = float(block.x_cm1[0]), float(block.x_cm1[-1])
    low_y, high_y = float(block.y.min()), float(block.y.max())
    room = (high_y - low_y) or 1.0
    low_y, high_y = low_y - 0.05 * room, high_y + 0.05 * room
    wide, high = PLOT_WIDTH - LEFT - RIGHT, PLOT_HEIGHT - TOP - BOTTOM

    def across(x_cm1: float) -> float:
        return LEFT + wide * (high_cm1 - x_cm1) / (high_cm1 - low_cm1)

    def down(y: float) -> float:
        return TOP + high * (high_y - y) / (high_y - low_y)

    points = " ".join(f"{across(x):.1f},{down(y):.1f}" for x, y in _thinned(block, columns=wide))
    floor = TOP + high
    edge = across(min(max(FINGERPRINT_BELOW_CM1, low_cm1), high_cm1))
    x_marks = format_html_join(
        "",
        '<line x1="{0}" y1="{1}" x2="{0}" y2="{2}"/><text x="{0}" y="{3}" text-anchor="middle">{4}</text>',
        ((_px(across(float(x))), floor, floor + 4, floor + 17, x) for x in _ticks(low_cm1, high_cm1, most=8)),
    )
    y_marks = format_html_join(
        "",
        '<line x1="{1}" y1="{0}" x2="{2}" y2="{0}"/><text x="{3}" y="{4}" text-anchor="end">{5}</text>',
        (
            (_px(down(float(y))), LEFT - 4, LEFT, LEFT - 7, _px(down(float(y)) + 4), y)
            for y in _ticks(low_y, high_y, most=5)
        ),
    )
    word = ORDINATE_WORDS[block.ordinate_used]
    return format_html(
        '<svg class="spectrum" role="img" aria-label="Spectrum from {} to {} cm⁻¹, {} points, {}"'
        ' viewBox="0 0 {} {}"><rect class="spectrum-fingerprint" x="{}" y="{}" width="{}" height="{}"/>'
        '<g class="spectrum-axis" font-size="12"><line x1="{}" y1="{}" x2="{}" y2="{}"/>{}{}'
        '<text x="{}" y="{}" text-anchor="middle">wavenumber / cm⁻¹</text>'
        '<text transform="translate(11 {}) rotate(-90)" text-anchor="middle">{}</text></g>'
        '<polyline class="spectrum-trace" points="{}"/></svg>',
        f"{high_cm1:.0f}",
        f"{low_cm1:.0f}",
        len(block.y),
        word,
        PLOT_WIDTH,
        PLOT_HEIGHT,
        _px(edge),
        TOP,
        _px(PLOT_WIDTH - RIGHT - edge),
        high,
        LEFT,
        floor,
        PLOT_WIDTH - RIGHT,
        floor,
        x_marks,
        y_marks,
        LEFT + wide / 2,
        PLOT_HEIGHT - 6,
        TOP + high / 2,
        word,
        points,
    )


def _thinned(block: SpectrumBlock, *, columns: int) -> list[Point]:
    """At most two points for each column of the drawing, the lowest and the highest: no band gets lost."""
    x, y = block.x_cm1, block.y
    if len(x) <= 2 * columns:
        return [(float(a), float(b)) for a, b in zip(x, y, strict=True)]
    kept: set[int] = {0, len(x) - 1}
    for column in range(columns):
        first, last = column * len(x) // columns, (column + 1) * len(x) // columns
        part = y[first:last]
        kept |= {first + int(part.argmin()), first + int(part.argmax())}
    return [(float(x[i]), float(y[i])) for i in sorted(kept)]


def _ticks(low: float, high: float, *, most: int) -> list[str]:
    """Round numbers inside the range, as text without needless zeros; at most `most` of them."""
    span = high - low
    power = 10.0 ** math.floor(math.log10(span))
    step = next(
        size * unit for unit in (power / 10, power, power * 10) for size in (1, 2, 5) if span / (size * unit) <= most
    )
    slack = 0.02  # a trace that ends at 3999.6 cm-1 still gets its 4000
    places = max(0, -math.floor(math.log10(step)))
    marks = range(math.ceil(low / step - slack), math.floor(high / step + slack) + 1)
    return [f"{number * step:.{places}f}" for number in marks]
