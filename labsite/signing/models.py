"""Electronic signatures: who, when, with what meaning, over which content. Never changed, never removed."""

from __future__ import annotations

from django.conf import settings
from django.db import models

from labsite.trail.triggers import register_append_only, register_trigger


class Meaning(models.TextChoices):
    PERFORMED = "performed", "Performed"
    REVIEWED = "reviewed", "Reviewed"
    APPROVED = "approved", "Approved"
    WITHDRAWN = "withdrawn", "Withdrawn"
    TRAIL_REVIEWED = "trail_reviewed", "Audit trail reviewed"


class Signature(models.Model):
    """One signature over the content with hash `content_hash` of the record (kind, subject_id).

    `digest` is the SHA-256 of the RFC 8785 text of every other column, so that no part can be exchanged unnoticed; it
    stands in the trail as well.
    """

    kind = models.CharField(max_length=60)
    subject_id = models.CharField(max_length=200)
    content_hash = models.CharField(max_length=64)
    meaning = models.CharField(max_length=30, choices=Meaning.choices)
    signer = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="signatures")
    printed_name = models.CharField(max_length=120)
    signed_at = models.DateTimeField()
    laboratory_time_text = models.CharField(max_length=80)
    digest = models.CharField(max_length=64, unique=True)

    class Meta:
        indexes = [models.Index(fields=["kind", "subject_id"], name="signature_by_subject")]
        constraints = [
            models.CheckConstraint(condition=models.Q(meaning__in=Meaning.values), name="signature_known_meaning")
        ]

    def __str__(self) -> str:
        return f"{self.get_meaning_display()} by {self.printed_name}"


class Proof(models.Model):
    """The right to make one signature within moments, earned by a password; only its hash is stored."""

    nonce_hash = models.CharField(max_length=64, primary_key=True)
    user = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    expires_at = models.DateTimeField()
    used_at = models.DateTimeField(null=True)


_PROOFS = Proof._meta.db_table

register_append_only(Signature._meta.db_table)
register_trigger(
    "signing_proof_used_once",
    _PROOFS,
    when="BEFORE UPDATE",
    sqlite="SELECT RAISE(ABORT, 'a proof is used once') WHERE OLD.used_at IS NOT NULL"
    " OR NEW.user_id <> OLD.user_id OR NEW.expires_at <> OLD.expires_at;",
    postgres="IF OLD.used_at IS NOT NULL OR NEW.user_id <> OLD.user_id OR NEW.expires_at <> OLD.expires_at THEN"
    " RAISE EXCEPTION 'a proof is used once' USING ERRCODE = 'integrity_constraint_violation'; END IF;",
)
