"""What the database itself refuses in the tables of this layer."""

from __future__ import annotations

from labsite.trail.triggers import register_append_only, register_trigger


def register() -> None:
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
