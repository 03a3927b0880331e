"""From bytes to spectra: the raw file stored by content, each upload of it, and each block as a spectrum."""

from __future__ import annotations

from django.conf import settings
from django.db import models

from spectra.models.instruments import Accessory
from spectra.models.master import TechniqueChoices
from spectra.models.receiving import Examination


class RawFile(models.Model):
    """Bytes as they came, stored once under their SHA-256; never changed, never removed."""

    sha256 = models.CharField(max_length=64, unique=True)
    size_bytes = models.PositiveBigIntegerField()
    stored_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    stored_at = models.DateTimeField()

    def __str__(self) -> str:
        return self.sha256[:12]


class UploadState(models.TextChoices):
    READ = "read", "read"
    NEEDS_ANSWER = "needs_answer", "needs an answer"
    REFUSED = "refused", "refused"
    ATTACHED = "attached", "attached unread"


class Upload(models.Model):
    """One file brought to one examination by one person. A refused one keeps its reason, and its bytes."""

    examination = models.ForeignKey(Examination, on_delete=models.PROTECT, related_name="uploads")
    raw_file = models.ForeignKey(RawFile, on_delete=models.PROTECT, related_name="uploads")
    file_name = models.CharField(max_length=255)
    state = models.CharField(max_length=20, choices=UploadState.choices)
    problem_code = models.CharField(max_length=80, blank=True)
    problem_text = models.TextField(blank=True)
    problem_line = models.PositiveIntegerField(null=True, blank=True)
    problem_remedy = models.TextField(blank=True)
    question = models.CharField(max_length=20, blank=True)
    answers = models.JSONField(default=dict, blank=True)
    facts = models.JSONField(default=dict, blank=True)  # what was stated beside a file that waits for an answer
    compared_with_original_by = models.ForeignKey(
        settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, blank=True, related_name="+"
    )
    uploaded_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    uploaded_at = models.DateTimeField()

    class Meta:
        ordering = ["uploaded_at", "pk"]


class SpectrumRole(models.TextChoices):
    DECISIVE = "decisive", "decisive"
    REPLICATE = "replicate", "replicate"
    REPEAT = "repeat", "repeat"
    BACKGROUND = "background", "background"
    BLANK = "blank", "blank"
    EXCLUDED = "excluded", "excluded"


class Spectrum(models.Model):
    """One block of an upload: its role in the examination and the facts of its measurement."""

    examination = models.ForeignKey(Examination, on_delete=models.PROTECT, related_name="spectra")
    upload = models.ForeignKey(Upload, on_delete=models.PROTECT, related_name="spectra")
    block_index = models.PositiveIntegerField(default=0)
    title = models.CharField(max_length=300, blank=True)
    role = models.CharField(max_length=12, choices=SpectrumRole.choices)
    role_before_exclusion = models.CharField(max_length=12, choices=SpectrumRole.choices, blank=True)
    excluded_reason = models.TextField(blank=True)
    technique = models.CharField(max_length=20, choices=TechniqueChoices.choices)
    accessory = models.ForeignKey(Accessory, on_delete=models.PROTECT, null=True, blank=True, related_name="spectra")
    atr_crystal_index = models.FloatField(null=True, blank=True)
    atr_angle_deg = models.FloatField(null=True, blank=True)
    atr_reflections = models.PositiveIntegerField(null=True, blank=True)
    resolution_cm1 = models.FloatField(null=True, blank=True)
    scans = models.PositiveIntegerField(null=True, blank=True)
    background_note = models.CharField(max_length=200, blank=True)
    already_processed = models.CharField(max_length=300, blank=True)
    prepared_by = models.ForeignKey(
        settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, blank=True, related_name="+"
    )
    measured_by = models.ForeignKey(
        settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, blank=True, related_name="+"
    )
    measured_at_text = models.CharField("measured at, by the instrument's clock", max_length=80, blank=True)
    ordinate_used = models.CharField(max_length=30)
    ordinate_declared = models.CharField(max_length=80, blank=True)
    axis_unit_declared = models.CharField(max_length=40, blank=True)
    coding = models.CharField(max_length=20)
    self_checking = models.BooleanField(default=False)
    points = models.PositiveIntegerField()
    first_cm1 = models.FloatField()
    last_cm1 = models.FloatField()
    arrays_sha256 = models.CharField(max_length=64)
    reading_findings = models.JSONField(default=list, blank=True)
    created_at = models.DateTimeField()

    class Meta:
        verbose_name_plural = "spectra"
        ordering = ["created_at", "pk"]
        constraints = [
            models.UniqueConstraint(fields=["upload", "block_index"], name="spectrum_block_once"),
            models.UniqueConstraint(
                fields=["examination"], condition=models.Q(role="decisive"), name="one_decisive_spectrum"
            ),
            models.CheckConstraint(
                condition=~models.Q(role="excluded") | ~models.Q(excluded_reason=""), name="exclusion_has_a_reason"
            ),
        ]

    def __str__(self) -> str:
        return self.title or self.upload.file_name
