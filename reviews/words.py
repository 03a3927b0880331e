"""The closed vocabularies, and how they read on a page. Pure: no Django, no database."""

from __future__ import annotations

from collections.abc import Mapping

VERDICTS: Mapping[str, Mapping[str, str]] = {
    "identity": {
        "consistent": "consistent with the reference",
        "consistent_with_differences": "consistent, with differences",
        "not_consistent": "not consistent with the reference",
        "not_distinguishable": "not distinguishable from another material",
        "cannot_be_compared": "cannot be compared",
    },
    "group": {
        "supported": "supported",
        "contradicted": "contradicted",
        "undecided": "undecided",
        "not_examined": "not examined",
    },
    "impurity": {
        "found": "found",
        "not_found_above_limit": "not found above its limit",
        "cannot_be_seen": "cannot be seen here",
    },
    "unexplained": {
        "open": "not explained",
        "explained": "explained",
        "artefact": "an artefact of the measurement",
    },
    "quality": {
        "usable": "usable for this test",
        "limits_reading": "limits what can be read",
        "not_usable": "not usable for this test",
    },
}


def verdict_words(kind: str, verdict: str) -> str:
    return VERDICTS.get(kind, {}).get(verdict, verdict.replace("_", " "))


def agrees_after(kind: str, verdict: str, *, expected: bool | None) -> str:
    """Whether a verdict agrees with the declaration: yes, no or neutral.

    `expected` is whether the declared material has the thing (a group), lacks it (False), or says nothing (None).
    """
    if kind == "identity":
        return {"consistent": "yes", "consistent_with_differences": "neutral", "not_consistent": "no"}.get(
            verdict, "neutral"
        )
    if kind == "group":
        if expected is None or verdict not in ("supported", "contradicted"):
            return "neutral"
        return "yes" if (verdict == "supported") == expected else "no"
    if kind == "impurity":
        return {"found": "no", "not_found_above_limit": "yes"}.get(verdict, "neutral")
    if kind == "unexplained":
        return {"open": "no"}.get(verdict, "neutral")
    return {"usable": "yes", "not_usable": "no"}.get(verdict, "neutral")
