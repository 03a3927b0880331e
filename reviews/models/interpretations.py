"""An interpretation, its immutable versions, their claims, the points a reviewer must see, and what was decided."""

from __future__ import annotations

from django.conf import settings
from django.db import models
from django.db.models import Q

from reviews.transitions import OPEN_STATES, STATE_WORDS, State


class Conclusion(models.TextChoices):
    """Of the identity test by infrared, never of the lot: lots are released elsewhere."""

    COMPLIES = "complies", "complies"
    DOES_NOT_COMPLY = "does_not_comply", "does not comply"
    INCONCLUSIVE = "inconclusive", "inconclusive"


class Interpretation(models.Model):
    examination = models.OneToOneField("spectra.Examination", on_delete=models.PROTECT, related_name="interpretation")
    created_at = models.DateTimeField()

    def __str__(self) -> str:
        return f"interpretation of {self.examination.code}"


class InterpretationVersion(models.Model):
    interpretation = models.ForeignKey(Interpretation, on_delete=models.PROTECT, related_name="versions")
    number = models.PositiveIntegerField()
    state = models.CharField(
        max_length=20, choices=[(state.value, STATE_WORDS[state]) for state in State], default=State.DRAFT
    )
    analysis = models.ForeignKey("spectra.Analysis", on_delete=models.PROTECT, related_name="+")
    revises = models.ForeignKey("self", on_delete=models.PROTECT, null=True, blank=True, related_name="revisions")
    opened_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    opened_at = models.DateTimeField()
    edits = models.PositiveIntegerField(default=0)  # raised by every change of the draft: a page shown before is stale
    conclusion = models.CharField(max_length=20, choices=Conclusion.choices, blank=True)
    conclusion_text = models.TextField(blank=True)
    submitted_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    submitted_at = models.DateTimeField(null=True)
    submission = models.ForeignKey("signing.Signature", on_delete=models.PROTECT, null=True, related_name="+")
    content = models.BinaryField(null=True)  # RFC 8785 bytes of all that was signed, cut at submission
    content_hash = models.CharField(max_length=64, blank=True)
    taken_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    taken_at = models.DateTimeField(null=True)

    class Meta:
        ordering = ["number"]
        constraints = [
            models.UniqueConstraint(fields=["interpretation", "number"], name="version_number"),
            models.UniqueConstraint(
                fields=["interpretation"], condition=Q(state__in=[str(s) for s in OPEN_STATES]), name="one_open_version"
            ),
            models.UniqueConstraint(
                fields=["interpretation"], condition=Q(state="approved"), name="one_effective_approved_version"
            ),
            models.CheckConstraint(
                condition=Q(state="draft") | (Q(content__isnull=False) & ~Q(content_hash="") & ~Q(conclusion="")),
                name="submitted_version_has_content",
            ),
        ]

    def __str__(self) -> str:
        return f"{self.interpretation.examination.code}, version {self.number}"


class ClaimKind(models.TextChoices):
    IDENTITY = "identity", "identity"
    GROUP = "group", "functional group"
    IMPURITY = "impurity", "impurity"
    UNEXPLAINED = "unexplained", "unexplained band"
    QUALITY = "quality", "measurement quality"


class ClaimStatus(models.TextChoices):
    PROPOSED = "proposed", "proposed by the analysis"
    CONFIRMED = "confirmed", "confirmed"
    CHANGED = "changed", "changed"
    ADDED = "added", "added by the analyst"


class Agrees(models.TextChoices):
    YES = "yes", "as declared"
    NO = "no", "against the declaration"
    NEUTRAL = "neutral", "open"


class Claim(models.Model):
    """One statement about the sample: what the analysis computed, frozen, and beside it what the analyst says."""

    version = models.ForeignKey(InterpretationVersion, on_delete=models.PROTECT, related_name="claims")
    key = models.CharField(max_length=140)
    kind = models.CharField(max_length=12, choices=ClaimKind.choices)
    subject = models.CharField(max_length=120, blank=True)  # the group's identifier, or the impurity's name
    title = models.CharField(max_length=200)
    sort = models.PositiveIntegerField(default=0)
    computed_verdict = models.CharField(max_length=40, blank=True)
    computed_agrees = models.CharField(max_length=10, choices=Agrees.choices, default=Agrees.NEUTRAL)
    computed_text = models.TextField(blank=True)
    evidence = models.JSONField(default=dict, blank=True)
    must_see = models.BooleanField(default=False)
    status = models.CharField(max_length=12, choices=ClaimStatus.choices, default=ClaimStatus.PROPOSED)
    verdict = models.CharField(max_length=40)
    agrees = models.CharField(max_length=10, choices=Agrees.choices, default=Agrees.NEUTRAL)
    reason = models.TextField(blank=True)
    stated_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    stated_at = models.DateTimeField(null=True)

    class Meta:
        ordering = ["sort", "pk"]
        constraints = [
            models.UniqueConstraint(fields=["version", "key"], name="claim_once"),
            models.CheckConstraint(
                condition=~Q(status__in=["changed", "added"]) | ~Q(reason=""), name="changed_claim_has_a_reason"
            ),
        ]


class MustSeePoint(models.Model):
    """Something the reviewer opens before signing; computed and frozen at submission."""

    version = models.ForeignKey(InterpretationVersion, on_delete=models.PROTECT, related_name="points")
    key = models.CharField(max_length=180)
    kind = models.CharField(max_length=20)
    title = models.CharField(max_length=300)
    detail = models.TextField(blank=True)
    claim = models.ForeignKey(Claim, on_delete=models.PROTECT, null=True, blank=True, related_name="points")
    region_low_cm1 = models.FloatField(null=True)
    region_high_cm1 = models.FloatField(null=True)
    comment_required = models.BooleanField(default=False)
    sort = models.PositiveIntegerField(default=0)

    class Meta:
        ordering = ["sort", "pk"]
        constraints = [models.UniqueConstraint(fields=["version", "key"], name="point_once")]


class Judgement(models.TextChoices):
    AGREE = "agree", "agree"
    DISAGREE = "disagree", "disagree"


class ReviewRead(models.Model):
    """What one reviewer opened and judged; a disagreement is answered by the analyst and settled by the reviewer."""

    point = models.ForeignKey(MustSeePoint, on_delete=models.PROTECT, related_name="reads")
    reviewer = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    opened_at = models.DateTimeField()
    judgement = models.CharField(max_length=10, choices=Judgement.choices, blank=True)
    judged_at = models.DateTimeField(null=True)
    comment = models.TextField(blank=True)
    answer = models.TextField(blank=True)
    answered_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    answered_at = models.DateTimeField(null=True)
    settled_at = models.DateTimeField(null=True)
    settlement = models.TextField(blank=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["point", "reviewer"], name="read_once"),
            models.CheckConstraint(
                condition=~Q(judgement="disagree") | ~Q(comment=""), name="disagreement_has_a_comment"
            ),
        ]


class Verdict(models.TextChoices):
    APPROVED = "approved", "approved"
    REJECTED = "rejected", "rejected"


class Decision(models.Model):
    """The one decision on one version. A trigger refuses it from anybody whose own work the examination is."""

    version = models.OneToOneField(InterpretationVersion, on_delete=models.PROTECT, related_name="decision")
    verdict = models.CharField(max_length=10, choices=Verdict.choices)
    by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    at = models.DateTimeField()
    comment = models.TextField(blank=True)
    reasons = models.JSONField(default=list, blank=True)
    signature = models.OneToOneField("signing.Signature", on_delete=models.PROTECT, related_name="+")

    class Meta:
        constraints = [
            models.CheckConstraint(condition=~Q(verdict="rejected") | ~Q(reasons=[]), name="rejection_has_a_reason")
        ]


class Withdrawal(models.Model):
    """QA takes an approved version out of effect; what was signed stays readable."""

    version = models.OneToOneField(InterpretationVersion, on_delete=models.PROTECT, related_name="withdrawal")
    by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    at = models.DateTimeField()
    reason = models.TextField()
    signature = models.OneToOneField("signing.Signature", on_delete=models.PROTECT, related_name="+")
