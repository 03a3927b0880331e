"""Read spectrum files from the shell, outside the record: the driver behind `manage.py examine`.

With `--json` one object is written for each spectrum, one on a line (a file of several blocks gives several lines):

========== ============================================================================================================
key        value
========== ============================================================================================================
schema     1
file       the path as it was given (kept out of `digest`)
sha256     SHA-256 of the file's bytes in hex; null where the file could not be opened
block      index of the block in its file, from 0; null where the file as a whole was refused
title      the block's title; null where the file as a whole was refused
status     "ok" or "refused"
problem    null when ok, else {code, message, line}; line may be null. Every key below `findings` is then absent
findings   list of {code, severity, message, region_cm1}; region_cm1 is [low, high] or null
axis       {first_cm1, last_cm1, points, spacing_cm1, declared_unit}; declared_unit may be null
ordinate   {declared, used}; declared may be null
noise_absorbance  standard deviation before smoothing; null where it could not be measured
bands      list of {position_cm1, height_absorbance, prominence_absorbance, fwhm_cm1, area_absorbance_cm1, intensity,
           shape, snr, kind}; no value is null
groups     list of {group, verdict, probability, agrees, for, against, would_decide}; probability is null unless it is
           calibrated; `for`, `against` and `would_decide` are lists of sentences
identity   {verdict, agrees, metrics, missing_bands, extra_bands, size_outliers}; absent without --declared. metrics is
           a list of {name, value, formula, region_cm1, pretreatment}; the band lists hold {position_cm1,
           height_absorbance, snr, ratio}, snr and ratio may be null
impurities {screened: [{name, estimate_fraction, standard_uncertainty, significance, detection_limit_fraction, scale,
           verdict}], unexplained: [{position_cm1, height_absorbance, snr}]}; absent without --declared. The four
           numbers of a screened item are null where its verdict is cannot_be_seen
versions   {core, group_table, group_table_digest, params_digest, reference, watch}; reference is null and watch empty
           without --declared and --watch; they hold SHA-256 of the files' bytes
digest     SHA-256 in hex over the RFC 8785 bytes of this object without `file` and `digest`; absent when refused
========== ============================================================================================================

Verdicts, of groups: supported, contradicted, undecided, not_examined; of identity: consistent,
consistent_with_differences, not_consistent, not_distinguishable, cannot_be_compared; of impurities: found,
not_found_above_limit, cannot_be_seen. agrees: yes, no, neutral. Nothing here is a record.

Answers (`--x-unit`, `--ordinate`) settle only what a file itself leaves open, in the sample as in every reference; a
file that states its own is read as it says, and a finding tells so. `findings` begins with what was remarked while the
references were read, each with the option and the name of its file before it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

from spectra.core import formats, group_table, pipeline
from spectra.core.errors import CoreError
from spectra.core.formats import ordinates
from spectra.core.formats.limits import MAX_FILE_BYTES
from spectra.core.params import MethodParams
from spectra.core.results import AnalysisResult, ReferenceInput, WatchInput
from spectra.core.types import (
    Conditions,
    Finding,
    Problem,
    ReadOptions,
    ReadResult,
    RefusedBlock,
    Severity,
    SpectrumBlock,
)
from spectra.core.version import RESULT_SCHEMA

GROUP_TABLE_FILE = Path(__file__).resolve().parent.parent / "fixtures" / "group_table" / "version_1.toml"

# The option that answers a question, by the name of the question and of the field of ReadOptions.
_OPTIONS = {
    "x_unit": "--x-unit cm-1, um or nm",
    "ordinate": "--ordinate absorbance, transmittance, percent_transmittance or reflectance",
    "columns": "--columns with a list like 1,3",
    "technique": "--technique atr or diffuse",
}
ANSWER_NOT_NEEDED = "examine.answer_not_needed"
_FINDING_KEYS = ("code", "severity", "message", "region_cm1")
_BAND_KEYS = (
    "position_cm1",
    "height_absorbance",
    "prominence_absorbance",
    "fwhm_cm1",
    "area_absorbance_cm1",
    "intensity",
    "shape",
    "snr",
    "kind",
)
_GROUP_KEYS = ("group", "verdict", "probability", "agrees", "for", "against", "would_decide")
_IDENTITY_KEYS = ("verdict", "agrees", "metrics", "missing_bands", "extra_bands", "size_outliers")
_SCREENED_KEYS = (
    "name",
    "estimate_fraction",
    "standard_uncertainty",
    "significance",
    "detection_limit_fraction",
    "scale",
    "verdict",
)
_UNEXPLAINED_KEYS = ("position_cm1", "height_absorbance", "snr")


@dataclass(frozen=True)
class Request:
    """What to compare the files with, and what was answered about them."""

    options: ReadOptions = field(default_factory=ReadOptions)
    conditions: Conditions = field(default_factory=Conditions)
    declared: Path | None = None
    watch: tuple[Path, ...] = ()
    smiles: str | None = None


@dataclass(frozen=True)
class Examined:
    """One spectrum: the object for programs and, when it was read, the whole result for people."""

    document: dict[str, object]
    result: AnalysisResult | None
    remedy: str = ""  # of a refusal: what to do, and with which option


class CannotStart(Exception):
    """The request itself cannot be carried out; nothing was examined."""


class Examiner:
    """Holds the parsed table and references; examines one file after another."""

    def __init__(self, request: Request):
        self.request = request
        self.params = MethodParams()
        self.table = group_table.load(GROUP_TABLE_FILE.read_text(encoding="utf-8"))
        self.reference_findings: list[Finding] = []
        self.reference = self._reference(request.declared) if request.declared else None
        self.watch = tuple(self._component(path) for path in request.watch)
        if request.smiles is not None:
            from spectra.core.structure import check_smiles

            try:
                check_smiles(request.smiles)
            except CoreError as error:
                raise CannotStart(f"--smiles: {error} {error.problem.remedy}".strip()) from error

    def _reference(self, path: Path) -> ReferenceInput:
        block, sha256 = self._only_block(path, "--declared")
        return ReferenceInput(block.title or path.name, block, self.request.conditions, sha256)

    def _component(self, path: Path) -> WatchInput:
        block, sha256 = self._only_block(path, "--watch")
        return WatchInput(block.title or path.name, block, self.request.conditions, sha256)

    def _only_block(self, path: Path, option: str) -> tuple[SpectrumBlock, str]:
        try:
            data = read_bytes(path)
        except CoreError as error:
            raise CannotStart(f"{option} {path}: {error} {error.problem.remedy}".strip()) from error
        result = read_as_stated(data, self.request.options)
        for block in result.blocks:
            if isinstance(block, SpectrumBlock):
                self.reference_findings += [
                    replace(
                        found,
                        message=f"{option} {path.name}: {found.message}",
                        # An answer is meant for the sample first, so a reference that needs none is no mistake.
                        severity=Severity.INFO if found.code == ANSWER_NOT_NEEDED else found.severity,
                    )
                    for found in block.findings
                ]
                return block, result.sha256
        problem = result.problem or next((block.problem for block in result.blocks), None)
        said = f"{problem.message} {remedy_of(problem)}".strip() if problem else "it holds no spectrum."
        raise CannotStart(f"{option} {path}: {said}")

    def examine(self, path: Path, shown: str) -> Iterator[Examined]:
        """Every spectrum of one file; refusals are results, too, so that one bad file stops nothing."""
        try:
            result = read_as_stated(read_bytes(path), self.request.options)
        except CoreError as error:
            yield Examined(_refused(shown, None, None, None, error.problem), None, remedy_of(error.problem))
            return
        if result.problem is not None or not result.blocks:
            problem = result.problem or Problem("reader.no_block", "The file holds no spectrum.")
            yield Examined(_refused(shown, result.sha256, None, None, problem), None, remedy_of(problem))
            return
        for block in result.blocks:
            if not isinstance(block, SpectrumBlock):
                yield Examined(
                    _refused(shown, result.sha256, block.index, block.title, block.problem, block.findings),
                    None,
                    remedy_of(block.problem),
                )
                continue
            try:
                analysed = pipeline.analyse(
                    block,
                    conditions=self.request.conditions,
                    params=self.params,
                    table=self.table,
                    reference=self.reference,
                    watch=self.watch,
                    smiles=self.request.smiles,
                )
            except CoreError as error:
                yield Examined(
                    _refused(shown, result.sha256, block.index, block.title, error.problem, block.findings),
                    None,
                    remedy_of(error.problem),
                )
                continue
            yield Examined(document_of(shown, result.sha256, block, analysed, self.reference_findings), analysed)


def read_as_stated(data: bytes, options: ReadOptions) -> ReadResult:
    """Read with the answers for axis unit and ordinate put in only where a block asks for them.

    An answer that a block did not need is named in its findings: nothing a file states is overridden.
    """
    plain_options = replace(options, x_unit=None, ordinate=None)
    readings = {plain_options: formats.read(data, plain_options)}

    def once(chosen: ReadOptions) -> ReadResult:
        if chosen not in readings:
            readings[chosen] = formats.read(data, chosen)
        return readings[chosen]

    used, result = plain_options, readings[plain_options]
    while result.problem is not None and (answered := _answered(used, result.problem, options)) is not None:
        used, result = answered, once(answered)
    blocks: list[SpectrumBlock | RefusedBlock] = []
    for place, block in enumerate(result.blocks):
        own = used
        while isinstance(block, RefusedBlock) and (answered := _answered(own, block.problem, options)) is not None:
            own, block = answered, once(answered).blocks[place]
        blocks.append(_with_answers_left_over(block, own, options))
    return replace(result, blocks=tuple(blocks))


def _answered(used: ReadOptions, problem: Problem, options: ReadOptions) -> ReadOptions | None:
    """`used` with the answer to the problem's question; None where there is none, or it was given already."""
    question = problem.question
    if question not in ("x_unit", "ordinate") or getattr(used, question) is not None:
        return None
    answer = getattr(options, question)
    return None if answer is None else replace(used, **{question: answer})


def _with_answers_left_over(
    block: SpectrumBlock | RefusedBlock, used: ReadOptions, options: ReadOptions
) -> SpectrumBlock | RefusedBlock:
    if not isinstance(block, SpectrumBlock):
        return block
    left_over = [
        Finding(
            ANSWER_NOT_NEEDED,
            Severity.WARNING,
            f"The file states this itself as {stated!r}; the answer {getattr(options, name).value} was not applied.",
            remedy=f"Leave {_OPTIONS[name].split(' ')[0]} out.",
        )
        for name, stated in (("x_unit", block.axis_unit_declared), ("ordinate", block.ordinate_declared))
        if getattr(options, name) is not None and getattr(used, name) is None and not _same(name, options, block)
    ]
    return replace(block, findings=(*block.findings, *left_over)) if left_over else block


def _same(name: str, options: ReadOptions, block: SpectrumBlock) -> bool:
    """Whether an answer says only what the file says as well."""
    if name == "ordinate":
        return options.ordinate is block.ordinate_used
    return ordinates.x_unit_named(block.axis_unit_declared) is options.x_unit


def remedy_of(problem: Problem) -> str:
    """What to do about a refusal, and the option that answers its question."""
    option = _OPTIONS.get(problem.question or "")
    return " ".join(part for part in (problem.remedy, f"Use {option}." if option else "") if part)


def read_bytes(path: Path) -> bytes:
    """The bytes of a regular file within the size limit; CoreError `examine.*` otherwise."""
    try:
        if not path.is_file():
            what = "is a folder" if path.is_dir() else "is no regular file" if path.exists() else "does not exist"
            raise CoreError("examine.cannot_open", f"The file {what}.", remedy="Name a spectrum file.")
        if path.stat().st_size > MAX_FILE_BYTES:
            raise CoreError(
                "examine.too_large",
                f"The file holds more than {MAX_FILE_BYTES // 2**20} MiB.",
                remedy="A spectrum file is far smaller; check which file this is.",
            )
        return path.read_bytes()
    except CoreError:
        raise
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise CoreError(
            "examine.cannot_open", f"The file cannot be opened: {reason}.", remedy="Check the name and the permissions."
        ) from error


def document_of(
    shown: str,
    sha256: str,
    block: SpectrumBlock,
    analysed: AnalysisResult,
    reference_findings: Sequence[Finding] = (),
) -> dict[str, object]:
    """The object of the module's table for one spectrum that was read."""
    body = analysed.to_json()
    document: dict[str, object] = {
        "schema": RESULT_SCHEMA,
        "file": shown,
        "sha256": sha256,
        "block": block.index,
        "title": block.title,
        "status": "ok",
        "problem": None,
        "findings": [*_finding_rows(reference_findings), *_narrowed(body["findings"], _FINDING_KEYS)],
        "axis": body["axis"],
        "ordinate": body["ordinate"],
        "noise_absorbance": body["noise_absorbance"],
        "bands": _narrowed(body["bands"], _BAND_KEYS),
        "groups": _narrowed(body["groups"], _GROUP_KEYS),
    }
    if "identity" in body:
        document["identity"] = _narrowed([body["identity"]], _IDENTITY_KEYS)[0]
    if "impurities" in body:
        document["impurities"] = {
            "screened": _narrowed(body["impurities"]["screened"], _SCREENED_KEYS),
            "unexplained": _narrowed(body["impurities"]["unexplained"], _UNEXPLAINED_KEYS),
        }
    document["versions"] = body["versions"]
    document["digest"] = pipeline.digest_of({key: value for key, value in document.items() if key != "file"})
    return document


def _narrowed(rows: object, keys: Sequence[str]) -> list[dict[str, object]]:
    return [{key: row[key] for key in keys} for row in rows]  # type: ignore[union-attr,index]


def _refused(
    shown: str,
    sha256: str | None,
    block: int | None,
    title: str | None,
    problem: Problem,
    findings: Sequence[Finding] = (),
) -> dict[str, object]:
    return {
        "schema": RESULT_SCHEMA,
        "file": shown,
        "sha256": sha256,
        "block": block,
        "title": title,
        "status": "refused",
        "problem": {"code": problem.code, "message": problem.message, "line": problem.line},
        "findings": _finding_rows(findings),
    }


def _finding_rows(findings: Sequence[Finding]) -> list[dict[str, object]]:
    return [
        {
            "code": f.code,
            "severity": f.severity.value,
            "message": f.message,
            "region_cm1": list(f.region_cm1) if f.region_cm1 else None,
        }
        for f in findings
    ]


# -- text for people ----------------------------------------------------------------------------------------------

Painter = Callable[[str, str], str]


def plain_painter(text: str, colour: str) -> str:
    """No colour at all."""
    return text


def terminal_painter(text: str, colour: str) -> str:
    """Terminal escape codes for good, bad, open, faint and strong."""
    codes = {"good": "32", "bad": "31", "open": "33", "faint": "2", "strong": "1"}
    return f"\x1b[{codes[colour]}m{text}\x1b[0m"


def printable(text: str) -> str:
    """Text from a file without control characters: a title must not steer somebody's terminal."""
    return "".join(ch if ch.isprintable() else " " for ch in text)


def report_of(examined: Examined, paint: Painter) -> str:
    """A small table that a chemist reads at a terminal."""
    document = examined.document
    title = printable(str(document["title"] or "(no title)"))
    lines = [
        paint(f"{printable(str(document['file']))}  block {document['block']}  {title}", "strong"),
        paint("A trial look: not a record.", "faint"),
    ]
    if document["status"] == "refused":
        problem = document["problem"]
        place = f" (line {problem['line']})" if problem["line"] else ""
        lines = [lines[0], paint(f"  REFUSED  {printable(problem['message'])}{place}  [{problem['code']}]", "bad")]
        return "\n".join([*lines, f"           {printable(examined.remedy)}"] if examined.remedy else lines)
    axis, ordinate, noise = document["axis"], document["ordinate"], document["noise_absorbance"]
    lines.append(
        f"  {axis['last_cm1']:.0f} to {axis['first_cm1']:.0f} cm-1, {axis['points']} points, read as "
        f"{ordinate['used']}; noise {'unknown' if noise is None else f'{noise:.2g} absorbance'}"
    )
    for finding in document["findings"]:
        if finding["severity"] != "info":
            lines.append(
                paint(f"  ! {printable(finding['message'])}", "bad" if finding["severity"] == "serious" else "open")
            )
    lines += _band_lines(document, paint) + _group_lines(examined, paint)
    if "identity" in document:
        lines += _identity_lines(examined, paint)
    if "impurities" in document:
        lines += _impurity_lines(examined, paint)
    return "\n".join(lines)


def _band_lines(document: dict[str, object], paint: Painter) -> list[str]:
    bands = [band for band in document["bands"] if band["kind"] != "shoulder"]  # type: ignore[union-attr]
    shoulders = len(document["bands"]) - len(bands)  # type: ignore[arg-type]
    lines = ["", paint("  cm-1      height    width  size  shape        S/N", "faint")]
    shown = sorted(sorted(bands, key=lambda b: -b["prominence_absorbance"])[:24], key=lambda b: -b["position_cm1"])
    for band in shown:
        mark = "  saturated" if band["kind"] == "saturated" else ""
        lines.append(
            f"  {band['position_cm1']:7.1f}  {band['height_absorbance']:8.4f}  {band['fwhm_cm1']:6.0f}  "
            f"{band['intensity']:<4}  {band['shape']:<10}  {band['snr']:6.0f}{mark}"
        )
    rest = len(bands) - len(shown)
    if rest or shoulders:
        lines.append(paint(f"  and {rest} smaller bands and {shoulders} shoulders (all of them with --json)", "faint"))
    return lines


def _group_lines(examined: Examined, paint: Painter) -> list[str]:
    claims = examined.result.groups if examined.result else ()
    lines = [""]
    for verdict, word, colour in (
        ("supported", "supported", "good"),
        ("contradicted", "against the declaration", "bad"),
        ("undecided", "undecided", "open"),
    ):
        chosen = [c for c in claims if c.verdict == verdict]
        if verdict == "contradicted":
            chosen = [c for c in chosen if c.agrees == "no"]
        if verdict == "undecided":
            chosen = [c for c in chosen if c.weight == "leans towards it" or c.hazard]
        for claim in chosen:
            shade = "bad" if claim.agrees == "no" else colour
            lines.append(f"  {paint(f'{word:<24}', shade)}{claim.label} ({claim.weight})")
            lines += [f"      + {sentence}" for sentence in claim.for_[:4]]
            lines += [f"      - {sentence}" for sentence in claim.against[:3]]
            if verdict == "undecided" and claim.would_decide:
                lines.append(f"      ? would decide: {'; '.join(claim.would_decide)}")
            if claim.hazard:
                lines.append(paint(f"      HAZARD NOTICE  {claim.hazard}", "bad"))
    return lines


def _identity_lines(examined: Examined, paint: Painter) -> list[str]:
    identity = examined.result.identity
    colour = {"yes": "good", "no": "bad", "neutral": "open"}[identity.agrees]
    lines = [
        "",
        f"  identity against {printable(identity.reference)}: {paint(identity.verdict.replace('_', ' '), colour)}",
    ]
    lines += [f"      + {sentence}" for sentence in identity.for_]
    lines += [f"      - {sentence}" for sentence in identity.against]
    return lines


def _impurity_lines(examined: Examined, paint: Painter) -> list[str]:
    impurities = examined.result.impurities
    lines = [""]
    for item in impurities.screened:
        colour = {"yes": "good", "no": "bad", "neutral": "open"}[item.agrees]
        lines.append(f"  {paint(f'{item.verdict.replace(chr(95), chr(32)):<24}', colour)}{printable(item.name)}")
        lines += [f"      {sentence}" for sentence in (*item.for_, *item.against)]
    if impurities.unexplained:
        places = ", ".join(f"{u.position_cm1:.0f} ({u.height_absorbance:.3f})" for u in impurities.unexplained[:12])
        lines.append(f"  left over and unexplained, cm-1 (absorbance): {places}")
    lines += [paint(f"      {note}", "faint") for note in impurities.notes]
    return lines
