"""From the result of an analysis to draft claims: the interface between computing and judging. Pure and frozen.

`draft_claims(result, ...)` reads the result's JSON form alone. Each claim carries what was computed, as it was
computed; what a person makes of it is written beside it, never over it. Keys are stable within an interpretation, so
that the next version of a claim can be laid beside the last one.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

MAX_UNEXPLAINED = 6


@dataclass(frozen=True)
class DraftClaim:
    """One claim as computed. kind: identity, group, impurity, unexplained, quality; agrees: yes, no, neutral."""

    key: str
    kind: str
    subject: str
    title: str
    verdict: str
    agrees: str
    text: str
    must_see: bool = False
    evidence: Mapping[str, object] = field(default_factory=dict)


def draft_claims(result: Mapping[str, object]) -> list[DraftClaim]:
    """The claims that one analysis gives rise to, those that need thought first within each kind.

    result : the analysis result as JSON types. Every key is there once.
    """
    return [_quality(result), *_identity(result), *_groups(result), *_impurities(result)]


def _quality(result: Mapping) -> DraftClaim:
    findings = [
        finding
        for finding in result.get("findings", ())
        # A remark on how the file declares itself stands beside the file; it limits the reading only when serious.
        if finding["severity"] == "serious"
        or (finding["severity"] == "warning" and not finding["code"].startswith("reader."))
    ]
    serious = [finding for finding in findings if finding["severity"] == "serious"]
    verdict = "not_usable" if serious else "limits_reading" if findings else "usable"
    text = " ".join(finding["message"] for finding in findings) or "Nothing in the measurement limits the reading."
    return DraftClaim(
        key="quality",
        kind="quality",
        subject="",
        title="Measurement",
        verdict=verdict,
        agrees={"usable": "yes", "limits_reading": "neutral", "not_usable": "no"}[verdict],
        text=text,
        must_see=bool(findings),
        evidence={
            "findings": findings,
            "for": [],
            "against": [finding["message"] for finding in findings],
            "would_decide": [finding["remedy"] for finding in findings if finding.get("remedy")],
        },
    )


def _identity(result: Mapping) -> list[DraftClaim]:
    identity = result.get("identity")
    if not identity:
        return [
            DraftClaim(
                key="identity",
                kind="identity",
                subject="",
                title="Identity",
                verdict="cannot_be_compared",
                agrees="neutral",
                text="The shelf holds no approved reference of the declared material, so nothing was compared.",
                must_see=True,
                evidence={
                    "for": [],
                    "against": [],
                    "would_decide": ["an approved reference of the declared material, measured in the same way"],
                },
            )
        ]
    return [
        DraftClaim(
            key="identity",
            kind="identity",
            subject=str(identity.get("reference", "")),
            title="Identity",
            verdict=identity["verdict"],
            agrees=identity["agrees"],
            text=_sentences(identity),
            must_see=identity["verdict"] != "consistent",
            evidence={
                name: identity.get(name, [])
                for name in (
                    "for",
                    "against",
                    "would_decide",
                    "metrics",
                    "missing_bands",
                    "extra_bands",
                    "size_outliers",
                )
            }
            | {"reference": identity.get("reference", ""), "bands_compared": identity.get("bands_compared")},
        )
    ]


def _groups(result: Mapping) -> list[DraftClaim]:
    """A claim for each group that the spectrum decides or the declaration speaks of; the rest stays in its lane."""
    expected = set((result.get("structure") or {}).get("expected_groups", ())) | set(
        (result.get("declared") or {}).get("expected_groups", ())
    )
    forbidden = set((result.get("declared") or {}).get("forbidden_groups", ()))
    supported = {item["group"] for item in result.get("groups", ()) if item["verdict"] == "supported"}
    claims = []
    for item in result.get("groups", ()):
        group, verdict = item["group"], item["verdict"]
        spoken_of = group in expected or group in forbidden
        # A hazard is shown on evidence that nothing speaks against: better once too often than unseen.
        if not spoken_of and supported & set(item.get("members", ())):
            continue  # the group itself is claimed: its wider class says nothing more
        alarming = bool(item.get("hazard")) and verdict == "undecided" and not item.get("against")
        if verdict != "supported" and not spoken_of and not alarming:
            continue
        claims.append(
            DraftClaim(
                key=f"group:{group}",
                kind="group",
                subject=group,
                title=item.get("label") or group.replace("_", " "),
                verdict=verdict,
                agrees=item["agrees"],
                text=_sentences(item),
                must_see=item["agrees"] == "no" or (bool(item.get("hazard")) and (alarming or verdict == "supported")),
                evidence={
                    "for": item.get("for", []),
                    "against": item.get("against", []),
                    "would_decide": item.get("would_decide", []),
                    "weight": item.get("weight", ""),
                    "probability": item.get("probability"),
                    "hazard": (item.get("hazard") or "") if alarming or verdict == "supported" else "",
                    "expected": group in expected,
                    "forbidden": group in forbidden,
                },
            )
        )
    order = {"no": 0, "neutral": 1, "yes": 2}
    return sorted(claims, key=lambda claim: (order[claim.agrees], not claim.evidence["expected"], claim.title))


def _impurities(result: Mapping) -> list[DraftClaim]:
    impurities = result.get("impurities")
    if not impurities:
        return []
    claims = [
        DraftClaim(
            key=f"impurity:{item['name']}",
            kind="impurity",
            subject=item["name"],
            title=item["name"],
            verdict=item["verdict"],
            agrees=item.get("agrees", "neutral"),
            text=_impurity_text(item),
            must_see=item["verdict"] != "not_found_above_limit",
            evidence=dict(item),
        )
        for item in impurities.get("screened", ())
    ]
    strongest = sorted(impurities.get("unexplained", ()), key=lambda band: -band["snr"])[:MAX_UNEXPLAINED]
    keys: set[str] = set()
    for band in strongest:
        position = band["position_cm1"]
        key = f"unexplained:{position:.0f}"
        if key in keys:
            key = f"unexplained:{position:.2f}"  # two within one wavenumber
        keys.add(key)
        claims.append(
            DraftClaim(
                key=key,
                kind="unexplained",
                subject=f"{position:.0f}",
                title=f"Unexplained band at {position:.0f} cm⁻¹",
                verdict="open",
                agrees="no",
                text=(
                    f"{position:.1f} cm⁻¹, height {band['height_absorbance']:.4f} in absorbance, "
                    f"signal-to-noise {band['snr']:.0f}; neither the reference nor the watch list has it."
                ),
                must_see=True,
                evidence=dict(band),
            )
        )
    order = {"no": 0, "neutral": 1, "yes": 2}
    return sorted(claims, key=lambda claim: order[claim.agrees])


def _impurity_text(item: Mapping) -> str:
    limit = item.get("detection_limit_fraction")
    scale = item.get("scale") or "fraction of peak height"
    if item["verdict"] == "found":
        text = f"{100 * item['estimate_fraction']:.2g} %"
        if item.get("standard_uncertainty") is not None:
            text += f" ± {100 * item['standard_uncertainty']:.1g} % (standard uncertainty)"
        return f"{text}, {scale}; detection limit in this spectrum {_percent(limit)}."
    if item["verdict"] == "not_found_above_limit":
        return f"Not found above {_percent(limit)} in this spectrum ({scale})."
    return _sentences(item) or "It cannot be seen in this spectrum."


def _percent(fraction: float | None) -> str:
    return "not known" if fraction is None else f"{100 * fraction:.2g} %"


def _sentences(item: Mapping) -> str:
    parts: Sequence[str] = [*item.get("for", ()), *item.get("against", ())]
    return " ".join(part if part.endswith(".") else part + "." for part in parts[:4])
