"""How the trail's pages say what this layer records, and which records belong to one examination's history."""

from __future__ import annotations

from labsite.trail.selectors import register_related
from labsite.trail.words import label_of, register_words
from reviews.models import ClaimStatus, Conclusion, InterpretationVersion, Judgement
from reviews.words import VERDICTS
from spectra.trail_words import group_name

LONGEST_ID = 18  # digits that every database takes for a number

LABELS = {
    "review_sha256": "Hash of the second reading",
    "decided_at": "Decided at",
    "withdrawn_at": "Withdrawn at",
    "by_version": "By version",
    "check": "Instrument check",
    "claim": "Statement",
    "claims": "Statements",
    "computed": "Computed",
    "point": "Point",
    "quality": "Measurement quality",
    "reasons": "Reasons for the rejection",
    "revises": "Revises version",
    "status": "Standing",
    "conclusion_text": "Comment on the conclusion",
    "undecided": "Expected groups undecided",
    "unseen": "Contaminants that cannot be seen",
    "same_file": "The same file as another sample",
    "earlier": "What changed since the version before",
}


def _of(what: str):
    def label(key: str) -> str:
        said = label_of(key)
        return f"{what}: {said[:1].lower()}{said[1:]}"

    return label


def register() -> None:
    every_verdict = {verdict: word for words in VERDICTS.values() for verdict, word in words.items()}
    register_words(
        labels=LABELS,
        values={
            **VERDICTS,  # of keys such as `group:ester`, `identity`
            "claim": label_of,
            "computed": every_verdict,
            "conclusion": dict(Conclusion.choices),
            "judgement": dict(Judgement.choices),
            "point": label_of,
            "points": label_of,
            "status": dict(ClaimStatus.choices),
            "verdict": every_verdict,
        },
        prefixes={
            "group": lambda group: f"Group {group_name(group)}",
            "impurity": lambda name: f"Contaminant {name}",
            "unexplained": lambda position_cm1: f"Unexplained band at {position_cm1}\u00a0cm\u207b\u00b9",
            "added": _of("Added"),
            "contradiction": _of("Contradiction"),
            "excluded": lambda number: f"Excluded spectrum {number}",
            "hazard": _of("Hazard"),
            "open": _of("Open"),
            "override": _of("Override"),
            "rerun": lambda number: f"Measured again, {number}",
        },
    )
    register_related("examination", _of_examination)
    register_related("interpretation", _of_version)


def _of_examination(subject_id: str) -> list[tuple[str, int]]:
    """An examination's history shows what was signed: the versions of its interpretation."""
    if not _is_number(subject_id):
        return []
    versions = InterpretationVersion.objects.filter(interpretation__examination_id=subject_id)
    return [("interpretation", pk) for pk in versions.values_list("pk", flat=True)]


def _of_version(subject_id: str) -> list[tuple[str, int]]:
    """A version is known by its examination: its history is the whole one."""
    if not _is_number(subject_id):
        return []
    of_one = InterpretationVersion.objects.filter(pk=subject_id)
    found = of_one.values_list("interpretation__examination_id", flat=True).first()
    return [] if found is None else [("examination", found), *_of_examination(str(found))]


def _is_number(subject_id: str) -> bool:
    return subject_id.isascii() and subject_id.isdecimal() and len(subject_id) <= LONGEST_ID
