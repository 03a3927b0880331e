"""The bench: lanes, bands, plot, claims and conclusion, for bench.html and its parts."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence

from django.urls import reverse

from labsite.accounts.models import User
from labsite.errors import DomainError
from reviews import permissions, selectors
from reviews.models import Claim, ClaimKind, ClaimStatus, Conclusion, Decision, InterpretationVersion, Withdrawal
from reviews.services import drafts
from reviews.transitions import Action, State
from reviews.words import VERDICTS
from spectra.models import Analysis, Spectrum


def lanes(result: Mapping, claimed: Sequence[str]) -> dict[str, list[dict[str, object]]]:
    """The lanes for _plot.html: first those that a claim speaks of or the spectrum supports; the rest stays folded."""
    items = {item["group"]: item for item in result.get("groups", ())}
    order = {"supported": 0, "undecided": 1, "contradicted": 2, "not_examined": 3}
    shown, folded = [], []
    for lane in result.get("lanes", ()):
        item = items.get(lane["group"], {})
        row = lane | {"agrees": item.get("agrees", "neutral"), "probability": item.get("probability")}
        (shown if lane["verdict"] == "supported" or lane["group"] in claimed else folded).append(row)

    def by_weight(row: Mapping) -> tuple:
        return (row["agrees"] != "no", order.get(row["verdict"], 4))

    return {"lanes": sorted(shown, key=by_weight), "lanes_folded": sorted(folded, key=by_weight)}


def claimed_groups(version: InterpretationVersion) -> list[str]:
    return [claim.subject for claim in version.claims.all() if claim.kind == ClaimKind.GROUP]


def measurement_cautions(spectrum: Spectrum, result: Mapping) -> list[dict[str, object]]:
    """What to mind before reading, for _findings.html: the measurement's findings, its instrument check, its file."""
    around = [selectors.check_sentence(spectrum), selectors.same_file_sentence(spectrum)]
    return [{"severity": "warning", "message": sentence} for sentence in around if sentence] + [
        finding for finding in result.get("findings", ()) if finding["severity"] != "info" or finding.get("remedy")
    ]


def band_rows(result: Mapping) -> list[dict[str, object]]:
    labels = {lane["group"]: lane["label"] for lane in result.get("lanes", ())}
    return [
        band | {"used_by": [labels.get(group, group.replace("_", " ")) for group in band.get("used_by", ())]}
        for band in sorted(result.get("bands", ()), key=lambda band: -band["position_cm1"])
    ]


def plot(spectrum: Spectrum, analysis: Analysis, result: Mapping) -> dict[str, object]:
    """What _plot.html needs to fetch and label the plot."""
    overlays = []
    if result.get("identity"):
        label = analysis.reference.code if analysis.reference else "reference"
        overlays = [
            {"key": "reference", "label": f"Reference {label}", "on": True},
            {"key": "residual", "label": "Residual", "on": False},
        ]
    overlays.append({"key": "baseline", "label": "Baseline", "on": False})
    relative = is_relative(result)
    return {
        "url": reverse("reviews:plot", args=[analysis.pk]),
        "title": f"Spectrum {spectrum.upload.file_name}",
        "show": "absorbance",
        "can_transmittance": not relative,
        "overlays": overlays,
    }


def is_relative(result: Mapping) -> bool:
    return bool((result.get("ordinate") or {}).get("relative"))


def claim_item(claim: Claim, *, lanes_by_group: Mapping[str, Sequence[float]]) -> dict[str, object]:
    """One claim for _claim.html."""
    evidence = claim.evidence
    positions = list(lanes_by_group.get(claim.subject, ())) if claim.kind == ClaimKind.GROUP else []
    if "position_cm1" in evidence:
        positions = [evidence["position_cm1"]]
    # A changed verdict must not stand over the sentence of the computed one.
    is_limit = claim.verdict == claim.computed_verdict and claim.verdict in ("found", "not_found_above_limit")
    version_args = [claim.version_id, claim.pk]
    return {
        "id": claim.pk,
        "kind": claim.kind,
        "title": claim.title,
        "group": claim.subject if claim.kind == ClaimKind.GROUP else "",
        "verdict": claim.verdict,
        "agrees": claim.agrees,
        "probability": evidence.get("probability"),
        "statement": "" if evidence.get("for") or evidence.get("against") else claim.computed_text,
        "points_for": evidence.get("for", []),
        "points_against": evidence.get("against", []),
        "would_decide": evidence.get("would_decide", []),
        "hazard": evidence.get("hazard", ""),
        "weight": evidence.get("weight", ""),
        "limit": claim.computed_text if is_limit else "",
        "band_positions_cm1": positions,
        "must_see": claim.must_see,
        "must_see_why": "The reviewer has to open this before deciding.",
        "status": "computed" if claim.status == ClaimStatus.PROPOSED else claim.status,
        "by": claim.stated_by.printed_name if claim.stated_by else "",
        "at": claim.stated_at,
        "reason": claim.reason,
        "computed_verdict": claim.computed_verdict,
        "computed_agrees": claim.computed_agrees,
        "choices": list(VERDICTS[claim.kind].items()),
        "confirm_url": reverse("reviews:confirm_claim", args=version_args),
        "change_url": reverse("reviews:change_claim", args=version_args),
        "remove_url": reverse("reviews:remove_claim", args=version_args) if claim.status == ClaimStatus.ADDED else "",
        "errors": None,
        "typed": {},
    }


def positions_by_group(result: Mapping) -> dict[str, list[float]]:
    return {
        lane["group"]: [position for window in lane["windows"] for position in window["band_positions_cm1"]]
        for lane in result.get("lanes", ())
    }


def claim_items(version: InterpretationVersion, result: Mapping) -> list[dict[str, object]]:
    positions = positions_by_group(result)
    claims = sorted(
        version.claims.all(),
        key=lambda c: (c.kind != ClaimKind.IDENTITY, c.status != "proposed", not c.must_see, c.sort),
    )
    return [claim_item(claim, lanes_by_group=positions) for claim in claims]


def bench_state(version: InterpretationVersion, user: User) -> dict[str, object]:
    """What changes with every claim: how many wait, whether it can be signed. Feeds _claims_head.html, _submit.html."""
    editable = permissions.may(user, version, Action.EDIT)
    states = Counter(claim.status for claim in version.claims.all())
    uneventful = [
        claim
        for claim in version.claims.all()
        if claim.status == ClaimStatus.PROPOSED and claim.computed_agrees == "yes" and not claim.must_see
    ]
    try:
        drafts.preview(version)
        ready, why_not = True, ""
    except DomainError as error:
        ready, why_not = False, f"{error.message} {error.remedy}".strip()
    return {
        "version": version,
        "editable": editable,
        "unconfirmed": states[ClaimStatus.PROPOSED],
        "confirm_all_url": reverse("reviews:confirm_uneventful", args=[version.pk]) if uneventful else "",
        "uneventful": len(uneventful),
        "submit": {"url": reverse("reviews:submit", args=[version.pk]), "ready": ready, "why_not": why_not},
        "why_read_only": "" if editable else read_only_sentence(version, user),
    }


def read_only_sentence(version: InterpretationVersion, user: User) -> str:
    if version.state == State.DRAFT:
        return "Only an analyst can work on the claims."
    return f"Version {version.number} is {version.get_state_display()}: its claims stay as they were signed."


def bench_conclusion(version: InterpretationVersion) -> dict[str, object]:
    return {
        "url": reverse("reviews:write_conclusion", args=[version.pk]),
        "value": version.conclusion,
        "text": version.conclusion_text,
        "choices": Conclusion.choices,
        "errors": {},
        "saved_at": None,
        "by": version.submitted_by.printed_name if version.submitted_by else "",
    }


def decision_notes(version: InterpretationVersion) -> list[dict[str, object]]:
    """What was decided on a version, each act with its own person, time, meaning and signature, in order."""
    notes = []
    decision = getattr(version, "decision", None)
    if decision is not None:
        reasons = [reason["text"] for reason in decision.reasons]
        notes.append(
            _signed_note(decision, decision.verdict, reasons + ([decision.comment] if decision.comment else []))
        )
    withdrawal = getattr(version, "withdrawal", None)
    if withdrawal is not None:
        notes.append(_signed_note(withdrawal, "withdrawn", [withdrawal.reason]))
    return notes


def _signed_note(act: Decision | Withdrawal, state: str, reasons: list[str]) -> dict[str, object]:
    return {
        "state": state,
        "by": act.signature.printed_name,
        "at": act.signature.signed_at,
        "meaning": act.signature.get_meaning_display(),
        "reasons": reasons,
        "signature_digest": act.signature.digest,
    }
