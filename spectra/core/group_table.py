"""The group table: parsed from TOML, judged row by row, frozen.

A table that holds a mistake is refused with the row it is in; nothing is repaired silently.
"""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass

from spectra.core.errors import CoreError

GROUP_IDS = (
    "alkane_ch",
    "alkene",
    "alkyne",
    "nitrile",
    "aromatic",
    "alcohol_oh",
    "phenol_oh",
    "ether",
    "epoxide",
    "aldehyde",
    "ketone",
    "ester",
    "lactone",
    "carboxylic_acid",
    "carboxylate",
    "anhydride",
    "acid_chloride",
    "carbonate_ester",
    "urethane",
    "amide",
    "imide",
    "amine_primary",
    "amine_secondary",
    "nitro",
    "isocyanate",
    "azide",
    "cyanide_ion",
    "nitrate_ester",
    "ammonium",
    "urea",
    "lactam",
    "sulfonyl_chloride",
    "peroxide",
    "thiol",
    "sulfoxide",
    "sulfone",
    "sulfonamide",
    "sulfonate",
    "sulfate",
    "c_f",
    "c_cl",
    "c_br_i",
    "silicone",
    "silicate",
    "mineral_oh",
    "phosphoryl",
    "phosphate",
    "carbonate_ion",
    "nitrate_ion",
    "polyol",
    "water",
    "carbon_dioxide",
)
CLASS_IDS = ("carbonyl", "oh_or_nh", "carbon_oxygen_single", "unsaturated_carbon", "halogenated")
ROLES = ("diagnostic", "companion", "supporting")
STRENGTHS = ("s", "m-s", "w-s", "m", "w-m", "w", "vw", "v")
ABSENCES = ("counts", "little", "nothing")
KINDS = ("band", "plateau")
STATUSES = ("confirmed", "memory")
LIMITS_CM1 = (150.0, 5000.0)
LARGEST_TABLE_CHARACTERS = 400_000
LONGEST_LINE_CHARACTERS = 2_000
DEEPEST_KEY = 4

_GROUP_KEYS = {
    "id",
    "name",
    "classes",
    "prior",
    "smarts",
    "hazard",
    "would_decide",
    "note",
    "needs",
    "implies",
    "one_band_only",
    "never_decidable",
    "bands",
}
_BAND_KEYS = {
    "name",
    "role",
    "set",
    "kind",
    "condensed",
    "gas",
    "strength",
    "width_cm1",
    "gas_width_cm1",
    "absence",
    "source",
    "status",
    "dominant",
}


@dataclass(frozen=True)
class BandRow:
    """One line of a group: its window for each phase in cm-1 (None: not looked for there)."""

    name: str
    role: str
    strength: str
    condensed: tuple[float, float] | None = None
    gas: tuple[float, float] | None = None
    set: str = ""
    kind: str = "band"
    width_cm1: tuple[float, float] = (0.0, 1000.0)
    gas_width_cm1: tuple[float, float] = (0.0, 1000.0)
    absence: str = "nothing"
    source: str = ""
    status: str = "memory"
    dominant: bool = False

    def window(self, gas: bool) -> tuple[float, float] | None:
        """The window for a phase in cm-1."""
        return self.gas if gas else self.condensed

    def widths(self, gas: bool) -> tuple[float, float]:
        """Least and most full width at half maximum in cm-1."""
        return self.gas_width_cm1 if gas else self.width_cm1


@dataclass(frozen=True)
class Group:
    """One functional group with everything the evidence model and the ledger say about it."""

    id: str
    name: str
    classes: tuple[str, ...]
    prior: float
    smarts: tuple[str, ...]
    bands: tuple[BandRow, ...]
    would_decide: tuple[str, ...]
    hazard: str | None = None
    note: str = ""
    needs: tuple[str, ...] = ()
    implies: tuple[str, ...] = ()  # groups that this one is a kind of
    one_band_only: bool = False
    never_decidable: bool = False


@dataclass(frozen=True)
class WiderClass:
    """A class of groups that can be decided when none of its members is."""

    id: str
    name: str
    members: tuple[str, ...]
    would_decide: tuple[str, ...]


@dataclass(frozen=True)
class Molecule:
    """A small gas that would be taken for organic groups: an alternative, never a claim."""

    id: str
    bands: tuple[BandRow, ...]


@dataclass(frozen=True)
class GroupTable:
    """One version of the table. `digest` is the SHA-256 of its text with line ends made equal."""

    version: str
    title: str
    groups: tuple[Group, ...]
    classes: tuple[WiderClass, ...]
    molecules: tuple[Molecule, ...]
    digest: str

    def group(self, group_id: str) -> Group:
        """The group with this identifier; KeyError when the table has none."""
        for item in self.groups:
            if item.id == group_id:
                return item
        raise KeyError(group_id)


def _judge_lines(text: str) -> None:
    """Refuse, before anything parses it, what takes the parser minutes and gigabytes: endless lines and nesting."""
    for number, line in enumerate(text.splitlines(), start=1):
        if len(line) > LONGEST_LINE_CHARACTERS:
            raise CoreError(
                "group_table.line_too_long",
                f"Line {number} holds more than {LONGEST_LINE_CHARACTERS} characters.",
                line=number,
                remedy="Break it into several entries.",
            )
        key = line.partition("=")[0]
        if key.count(".") > DEEPEST_KEY or key.count("[") > DEEPEST_KEY:
            raise CoreError(
                "group_table.too_deep",
                f"Line {number} nests deeper than the table's own layout.",
                line=number,
                remedy="Write groups, bands and classes as in the shipped table.",
            )


def load(text: str) -> GroupTable:
    """Parse and judge a table.

    Raises CoreError (code `group_table.*`) naming the group and the band row of the first mistake.
    """
    if len(text) > LARGEST_TABLE_CHARACTERS:
        raise CoreError(
            "group_table.too_long",
            f"The table holds more than {LARGEST_TABLE_CHARACTERS} characters.",
            remedy="Remove what is not a group row.",
        )
    _judge_lines(text)
    try:
        data = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as error:  # ValueError: a number of endless digits
        raise CoreError(
            "group_table.syntax", f"The table is not valid TOML: {error}.", remedy="Correct the line that is named."
        ) from error
    unknown = set(data) - {"version", "title", "group", "class", "molecule"}
    if unknown:
        raise CoreError(
            "group_table.key",
            f"The table has an unknown key: {sorted(unknown)[0]}.",
            remedy="Use only version, title, group, class and molecule.",
        )
    version = data.get("version")
    if not isinstance(version, str) or not version.strip():
        raise CoreError("group_table.version", "The table names no version.", remedy='Add version = "...".')
    groups = tuple(_group(i, row) for i, row in enumerate(_rows(data, "group"), start=1))
    if not groups:
        raise CoreError("group_table.empty", "The table holds no group.", remedy="Add at least one [[group]].")
    seen: set[str] = set()
    for i, item in enumerate(groups, start=1):
        if item.id in seen:
            raise _mistake(f"group {i} ({item.id})", "this identifier occurs twice", "Keep one of the two.")
        seen.add(item.id)
    for i, item in enumerate(groups, start=1):
        for need in (*item.needs, *item.implies):
            if need not in seen:
                raise _mistake(
                    f"group {i} ({item.id})",
                    f"it names {need}, which the table does not hold",
                    "Add that group or take the name away.",
                )
    classes = tuple(_class(i, row, groups) for i, row in enumerate(_rows(data, "class"), start=1))
    molecules = tuple(_molecule(i, row) for i, row in enumerate(_rows(data, "molecule"), start=1))
    digest = hashlib.sha256(text.replace("\r\n", "\n").replace("\r", "\n").encode("utf-8", "replace")).hexdigest()
    return GroupTable(version.strip(), str(data.get("title", "")), groups, classes, molecules, digest)


def _rows(data: Mapping[str, object], key: str) -> list[Mapping[str, object]]:
    rows = data.get(key, [])
    if not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
        raise CoreError(
            "group_table.rows", f"{key} has to be a list of tables.", remedy=f"Write [[{key}]] before each."
        )
    return rows


def _mistake(place: str, what: str, remedy: str) -> CoreError:
    return CoreError("group_table.row", f"{place}: {what}.", remedy=remedy)


def _texts(place: str, row: Mapping[str, object], key: str) -> tuple[str, ...]:
    value = row.get(key, [])
    if not isinstance(value, list) or not all(isinstance(item, str) for item in value):
        raise _mistake(place, f"{key} has to be a list of texts", "Write it in square brackets with quotes.")
    return tuple(value)


def _group(number: int, row: Mapping[str, object]) -> Group:
    identifier = row.get("id")
    place = f"group {number} ({identifier})"
    unknown = set(row) - _GROUP_KEYS
    if unknown:
        raise _mistake(place, f"unknown key {sorted(unknown)[0]}", "Correct its spelling.")
    if identifier not in GROUP_IDS:
        raise _mistake(place, "the identifier is not one of the known groups", "Use an identifier of the list.")
    prior = row.get("prior")
    if isinstance(prior, bool) or not isinstance(prior, (int, float)) or not 0 < prior < 1:
        raise _mistake(place, "prior has to lie between 0 and 1", "Enter how often the group occurs, as a share.")
    classes = _texts(place, row, "classes")
    for name in classes:
        if name not in CLASS_IDS:
            raise _mistake(place, f"unknown class {name}", "Use a class of the list.")
    bands = row.get("bands", [])
    if not isinstance(bands, list) or not all(isinstance(band, dict) for band in bands):
        raise _mistake(place, "bands has to be a list of rows", "Write one row in braces for each band.")
    never = bool(row.get("never_decidable", False))
    rows = tuple(_band(f"{place}, band {i}", band) for i, band in enumerate(bands, start=1))
    if not never and not any(band.role == "diagnostic" for band in rows):
        raise _mistake(place, "it has no diagnostic band", "Mark at least one band as diagnostic.")
    decide = _texts(place, row, "would_decide")
    if not decide:
        raise _mistake(place, "would_decide is empty", "Name at least one test that would decide.")
    return Group(
        id=str(identifier),
        name=str(row.get("name", identifier)),
        classes=classes,
        prior=float(prior),
        smarts=_texts(place, row, "smarts"),
        bands=rows,
        would_decide=decide,
        hazard=row.get("hazard") or None,
        note=str(row.get("note", "")),
        needs=_texts(place, row, "needs"),
        implies=_texts(place, row, "implies"),
        one_band_only=bool(row.get("one_band_only", False)),
        never_decidable=never,
    )


def _pair(place: str, row: Mapping[str, object], key: str, limits: tuple[float, float]) -> tuple[float, float] | None:
    value = row.get(key)
    if value is None:
        return None
    good = (
        isinstance(value, list)
        and len(value) == 2
        and all(isinstance(v, (int, float)) and not isinstance(v, bool) for v in value)
    )
    if not good:
        raise _mistake(place, f"{key} has to be two numbers", "Write [low, high] in cm-1.")
    low, high = float(value[0]), float(value[1])
    if not low < high:
        raise _mistake(
            place, f"{key} runs from {low:g} to {high:g}, the wrong way round", "Put the lower number first."
        )
    if low < limits[0] or high > limits[1]:
        raise _mistake(
            place,
            f"{key} {low:g}-{high:g} lies outside {limits[0]:g}-{limits[1]:g} cm-1",
            "Enter wavenumbers of the mid-infrared.",
        )
    return low, high


def _choice(place: str, row: Mapping[str, object], key: str, allowed: tuple[str, ...], default: str | None) -> str:
    value = row.get(key, default)
    if value not in allowed:
        raise _mistake(place, f"{key} is {value!r}; allowed are {', '.join(allowed)}", "Choose one of them.")
    return str(value)


def _band(place: str, row: Mapping[str, object], *, is_molecule: bool = False) -> BandRow:
    unknown = set(row) - _BAND_KEYS
    if unknown:
        raise _mistake(place, f"unknown key {sorted(unknown)[0]}", "Correct its spelling.")
    name = row.get("name")
    if not isinstance(name, str) or not name:
        raise _mistake(place, "it has no name", "Name the vibration.")
    place = f"{place} ({name})"
    condensed, gas = _pair(place, row, "condensed", LIMITS_CM1), _pair(place, row, "gas", LIMITS_CM1)
    if condensed is None and gas is None:
        raise _mistake(place, "it has no window", "Give condensed or gas as [low, high] in cm-1.")
    width = _pair(place, row, "width_cm1", (0.0, 2000.0)) or (0.0, 1000.0)
    source = row.get("source", "")
    if not is_molecule and (not isinstance(source, str) or not source):
        raise _mistake(place, "it names no source", "Name the source, or handbooks with status memory.")
    return BandRow(
        name=name,
        role="diagnostic" if is_molecule else _choice(place, row, "role", ROLES, None),
        strength=_choice(place, row, "strength", STRENGTHS, None),
        condensed=condensed,
        gas=gas,
        set=str(row.get("set", "")),
        kind=_choice(place, row, "kind", KINDS, "band"),
        width_cm1=width,
        gas_width_cm1=_pair(place, row, "gas_width_cm1", (0.0, 2000.0)) or (0.0, 1000.0),
        absence="counts" if is_molecule else _choice(place, row, "absence", ABSENCES, None),
        source=str(source),
        status="memory" if is_molecule else _choice(place, row, "status", STATUSES, None),
        dominant=bool(row.get("dominant", False)),
    )


def _class(number: int, row: Mapping[str, object], groups: tuple[Group, ...]) -> WiderClass:
    identifier = row.get("id")
    place = f"class {number} ({identifier})"
    if identifier not in CLASS_IDS:
        raise _mistake(place, "the identifier is not one of the known classes", "Use an identifier of the list.")
    members = tuple(item.id for item in groups if identifier in item.classes)
    if not members:
        raise _mistake(place, "no group belongs to it", "Name the class at its groups.")
    return WiderClass(str(identifier), str(row.get("name", identifier)), members, _texts(place, row, "would_decide"))


def _molecule(number: int, row: Mapping[str, object]) -> Molecule:
    place = f"molecule {number} ({row.get('id')})"
    bands = row.get("bands", [])
    if not isinstance(row.get("id"), str) or not isinstance(bands, list) or not bands:
        raise _mistake(place, "it needs an id and bands", "Complete the row.")
    return Molecule(
        str(row["id"]),
        tuple(_band(f"{place}, band {i}", band, is_molecule=True) for i, band in enumerate(bands, start=1)),
    )
