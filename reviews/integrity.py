"""What this layer guards in the database itself, what verification checks, and where it hooks into the layer below."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator

from labsite.errors import NotPossible
from labsite.signing.models import Meaning, Signature
from labsite.trail.triggers import register_append_only, register_trigger
from labsite.trail.verify import Damage, register_verifier
from reviews import content
from reviews.models import InterpretationVersion, Verdict
from reviews.selectors import latest_version
from reviews.services.drafts import draft_from_analysis
from reviews.services.reviewing import return_overdue
from reviews.transitions import DECIDED_STATES, State
from spectra import hooks


def register() -> None:
    hooks.on_analysis_done.append(draft_from_analysis)
    hooks.before_evidence_changes.append(evidence_may_change)
    hooks.each_sweep.append(return_overdue)

    register_append_only("reviews_decision")
    register_append_only("reviews_withdrawal")
    register_append_only("reviews_mustseepoint")
    own_work = "nobody decides on an examination they had a hand in"
    register_trigger(
        "decision_by_another",
        "reviews_decision",
        **_refuse(
            own_work,
            "EXISTS (SELECT 1 FROM reviews_interpretationversion v"
            " JOIN reviews_interpretation i ON i.id = v.interpretation_id"
            " JOIN spectra_contribution c ON c.examination_id = i.examination_id"
            " WHERE v.id = NEW.version_id AND c.user_id = NEW.by_id)",
        ),
    )
    _guard_versions()
    _guard_claims()
    _guard_reads()
    register_verifier("interpretations", damaged_interpretations)


def _refuse(why: str, condition: str) -> dict[str, str]:
    """The two bodies of a trigger that refuses where `condition` holds; written for PostgreSQL, read by both."""
    return {
        "sqlite": f"SELECT RAISE(ABORT, '{why}') WHERE {condition.replace('IS DISTINCT FROM', 'IS NOT')};",
        "postgres": f"IF {condition} THEN RAISE EXCEPTION '{why}'"
        " USING ERRCODE = 'integrity_constraint_violation'; END IF;",
    }


FROZEN = "a submitted version is never edited"
FROZEN_COLUMNS = (
    "content content_hash conclusion conclusion_text analysis_id number interpretation_id revises_id"
    " submission_id submitted_by_id submitted_at"
).split()


def _guard_versions() -> None:
    table = "reviews_interpretationversion"
    register_append_only(table, updates=True)
    changed = " OR ".join(f"NEW.{column} IS DISTINCT FROM OLD.{column}" for column in FROZEN_COLUMNS)
    register_trigger(
        "submitted_version_is_frozen",
        table,
        when="BEFORE UPDATE",
        **_refuse(FROZEN, f"OLD.state <> 'draft' AND ({changed} OR NEW.state = 'draft')"),
    )
    register_trigger(
        "decision_is_never_undone",
        table,
        when="BEFORE UPDATE",
        **_refuse(
            "a decision is never undone",
            "NEW.state <> OLD.state AND (OLD.state IN ('rejected', 'withdrawn', 'superseded')"
            " OR (OLD.state = 'approved' AND NEW.state NOT IN ('withdrawn', 'superseded')))",
        ),
    )
    register_trigger(
        "decided_state_has_a_decision",
        table,
        when="BEFORE UPDATE",
        **_refuse(
            "a version is decided by a signed decision alone",
            "NEW.state <> OLD.state AND NEW.state IN ('approved', 'rejected') AND NOT EXISTS (SELECT 1"
            " FROM reviews_decision d WHERE d.version_id = NEW.id AND d.verdict = NEW.state)",
        ),
    )


def _guard_claims() -> None:
    for when, name, row in (
        ("BEFORE INSERT", "claims_enter_drafts_only", "NEW"),
        ("BEFORE UPDATE", "submitted_claim_is_frozen", "OLD"),
        ("BEFORE DELETE", "submitted_claim_is_kept", "OLD"),
    ):
        condition = (
            "EXISTS (SELECT 1 FROM reviews_interpretationversion v"
            f" WHERE v.id = {row}.version_id AND v.state <> 'draft')"
        )
        register_trigger(name, "reviews_claim", when=when, **_refuse(FROZEN, condition))


def _guard_reads() -> None:
    """What a reviewer opened and judged stays as it was when they decided."""
    register_append_only("reviews_reviewread", updates=True)
    for when, name, row in (
        ("BEFORE INSERT", "reads_enter_reviews_only", "NEW"),
        ("BEFORE UPDATE", "decided_read_is_frozen", "OLD"),
    ):
        condition = (
            "EXISTS (SELECT 1 FROM reviews_mustseepoint p JOIN reviews_interpretationversion v ON v.id = p.version_id"
            f" WHERE p.id = {row}.point_id AND v.state NOT IN ('reading_blind', 'in_review'))"
        )
        register_trigger(
            name, "reviews_reviewread", when=when, **_refuse("a decided review is never edited", condition)
        )


def evidence_may_change(examination, by) -> None:
    """Files and roles change only while the interpretation is a draft, or before there is one."""
    version = latest_version(examination)
    if version is None or version.state == State.DRAFT:
        return
    if version.state in (State.SUBMITTED, State.READING_BLIND, State.IN_REVIEW):
        raise NotPossible(
            "examination.with_reviewer",
            f"Version {version.number} is with a reviewer, so its evidence stays as it was signed.",
            remedy="Wait for the decision. If it is rejected, revise it and bring in the file then.",
        )
    raise NotPossible(
        "examination.decided",
        f"Version {version.number} is {version.get_state_display()}, so its evidence stays as it was signed.",
        remedy="Revise the interpretation first; then files can be added to the new version.",
    )


def damaged_interpretations() -> Iterator[Damage]:
    """Every version against its state, its hash, its signatures, its rows, and the analysis it rests on."""
    # The signatures first: what is signed meanwhile is then in the versions at worst, never missing from them.
    made = list(Signature.objects.filter(kind="interpretation").order_by("pk").values_list("pk", "subject_id"))
    used: set[int] = set()
    rows = (
        InterpretationVersion.objects.select_related(
            "submission", "analysis", "interpretation__examination", "decision__signature", "withdrawal__signature"
        )
        .prefetch_related("claims", "points", "interpretation__examination__contributions")
        .order_by("pk")
    )
    for row in rows.iterator(chunk_size=100):
        where = f"interpretation {row}"
        if row.state == State.DRAFT:
            if row.content is not None or row.submission_id is not None or row.content_hash:
                yield Damage(where=where, what="It was submitted, and was made a draft again.")
                used.add(row.submission_id)
            continue
        yield from _content_damages(row, where)
        yield from _signature_damages(row, where, used)
        yield from _state_damages(row, where)
    for pk, subject in made:
        if pk not in used:
            yield Damage(where=f"signature {pk}", what=f"What it signed on interpretation version {subject} is gone.")


def _content_damages(row, where: str) -> Iterator[Damage]:
    if row.content is None or hashlib.sha256(bytes(row.content)).hexdigest() != row.content_hash:
        yield Damage(where=where, what="The stored content does not fit the hash that was signed.")
        return
    document = json.loads(bytes(row.content))
    if (document["examination"], document["version"]) != (row.interpretation.examination.code, row.number):
        yield Damage(where=where, what="The signed content belongs to another version.")
    if (document["conclusion"], document["conclusion_text"]) != (row.conclusion, row.conclusion_text):
        yield Damage(where=where, what="The conclusion shown differs from the signed one.")
    if (document["analysis"]["id"], document["analysis"]["result_digest"]) != (
        row.analysis_id,
        row.analysis.result_digest,
    ):
        yield Damage(where=where, what="The analysis it rests on differs from the one that was signed.")
    yield from _rows_differ(f"{where}, claim", "claim", document["claims"], row.claims.all(), content.claim_content)
    yield from _rows_differ(f"{where}, point", "point", document["points"], row.points.all(), content.point_content)


def _rows_differ(where: str, noun: str, signed: list[dict], rows, form) -> Iterator[Damage]:
    """The rows that pages show, against the signed document."""
    was = {item["key"]: item for item in signed}
    shown = {row.key: form(row) for row in rows}
    for key in sorted(was.keys() | shown.keys()):
        if key not in shown:
            yield Damage(where=f"{where} {key}", what=f"The signed {noun} is gone.")
        elif key not in was:
            yield Damage(where=f"{where} {key}", what=f"The {noun} shown was never signed.")
        elif was[key] != shown[key]:
            parts = ", ".join(name for name in shown[key] if was[key].get(name) != shown[key][name])
            yield Damage(where=f"{where} {key}", what=f"The {noun} shown differs from the signed one: {parts}.")


def _signature_damages(row, where: str, used: set[int]) -> Iterator[Damage]:
    decision, withdrawal = getattr(row, "decision", None), getattr(row, "withdrawal", None)
    expected = [("submission", row.submission, Meaning.PERFORMED, row.submitted_by_id)]
    if decision is not None:
        expected.append(("decision", decision.signature, Meaning.REVIEWED, decision.by_id))
    if withdrawal is not None:
        expected.append(("withdrawal", withdrawal.signature, Meaning.WITHDRAWN, withdrawal.by_id))
    for noun, signature, meaning, signer in expected:
        if signature is None:
            yield Damage(where=where, what=f"Its {noun} is not signed.")
            continue
        used.add(signature.pk)
        if signature.content_hash != row.content_hash:
            yield Damage(where=where, what=f"Its {noun} is not signed over this content.")
        about = (signature.kind, signature.subject_id, signature.meaning, signature.signer_id)
        if about != ("interpretation", str(row.pk), meaning, signer):
            yield Damage(where=where, what=f"Its {noun} carries a signature that was made for something else.")


def _state_damages(row, where: str) -> Iterator[Damage]:
    state, decision = State(row.state), getattr(row, "decision", None)
    if decision is None:
        if state in DECIDED_STATES:
            yield Damage(where=where, what=f"It is {row.get_state_display()} without a signed decision.")
        return
    follows = {
        Verdict.APPROVED: (State.APPROVED, State.WITHDRAWN, State.SUPERSEDED),
        Verdict.REJECTED: (State.REJECTED,),
    }
    if state not in follows.get(decision.verdict, ()):
        yield Damage(where=where, what="Its state does not follow from its decision.")
    if (state is State.WITHDRAWN) != hasattr(row, "withdrawal"):
        yield Damage(where=where, what="Its state does not follow from its withdrawal.")
    if decision.by_id in {contribution.user_id for contribution in row.interpretation.examination.contributions.all()}:
        yield Damage(where=where, what="It was decided by somebody whose own work it is.")
