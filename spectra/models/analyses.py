"""An analysis: the row is the work order and the result. The rows below it are the result's index for search."""

from __future__ import annotations

from django.conf import settings
from django.db import models
from django.db.models import Q

from spectra.models.master import GroupTable, MaterialVersion, MethodVersion, Reference, WatchList
from spectra.models.measurements import Spectrum


class AnalysisState(models.TextChoices):
    QUEUED = "queued", "waiting"
    RUNNING = "running", "running"
    DONE = "done", "done"
    FAILED = "failed", "failed"


class Analysis(models.Model):
    spectrum = models.ForeignKey(Spectrum, on_delete=models.PROTECT, related_name="analyses")
    method = models.ForeignKey(MethodVersion, on_delete=models.PROTECT, related_name="+")
    group_table = models.ForeignKey(GroupTable, on_delete=models.PROTECT, related_name="+")
    material_version = models.ForeignKey(MaterialVersion, on_delete=models.PROTECT, related_name="+")
    reference = models.ForeignKey(Reference, on_delete=models.PROTECT, null=True, blank=True, related_name="analyses")
    watch_list = models.ForeignKey(WatchList, on_delete=models.PROTECT, null=True, blank=True, related_name="+")
    state = models.CharField(max_length=10, choices=AnalysisState.choices, default=AnalysisState.QUEUED)
    step = models.CharField(max_length=80, blank=True)
    progress_percent = models.PositiveSmallIntegerField(default=0)
    # The lease: who works on it, in which attempt; the sweep watches whether `heartbeat` moves.
    attempt = models.PositiveSmallIntegerField(default=0)
    worker = models.CharField(max_length=120, blank=True)
    worker_pid = models.PositiveIntegerField(null=True, blank=True)
    heartbeat = models.PositiveBigIntegerField(default=0)
    queued_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    queued_at = models.DateTimeField()
    started_at = models.DateTimeField(null=True, blank=True)
    finished_at = models.DateTimeField(null=True, blank=True)
    problem_code = models.CharField(max_length=80, blank=True)
    problem_text = models.TextField(blank=True)
    result = models.BinaryField(null=True, blank=True)  # RFC 8785 bytes; the digest is their SHA-256
    result_digest = models.CharField(max_length=64, blank=True)
    curves_sha256 = models.CharField(max_length=64, blank=True)
    core_version = models.CharField(max_length=40, blank=True)
    environment = models.JSONField(default=dict, blank=True)

    class Meta:
        verbose_name_plural = "analyses"
        indexes = [models.Index(fields=["state", "queued_at"], name="analysis_queue")]
        constraints = [
            models.CheckConstraint(
                condition=~Q(state="done") | (Q(result__isnull=False) & ~Q(result_digest="")), name="done_has_a_result"
            ),
        ]


class Band(models.Model):
    analysis = models.ForeignKey(Analysis, on_delete=models.PROTECT, related_name="bands")
    number = models.PositiveIntegerField()
    position_cm1 = models.FloatField()
    height_absorbance = models.FloatField()
    snr = models.FloatField(null=True)
    kind = models.CharField(max_length=20)

    class Meta:
        indexes = [models.Index(fields=["position_cm1"], name="band_position")]
        ordering = ["number"]


class GroupFinding(models.Model):
    analysis = models.ForeignKey(Analysis, on_delete=models.PROTECT, related_name="group_findings")
    group = models.CharField(max_length=40)
    verdict = models.CharField(max_length=20)
    agrees = models.CharField(max_length=10)

    class Meta:
        indexes = [models.Index(fields=["group", "verdict"], name="group_verdict")]


class ReferenceMatch(models.Model):
    analysis = models.ForeignKey(Analysis, on_delete=models.PROTECT, related_name="matches")
    reference = models.ForeignKey(Reference, on_delete=models.PROTECT, related_name="+")
    verdict = models.CharField(max_length=30)
    agrees = models.CharField(max_length=10)


class ImpurityFinding(models.Model):
    analysis = models.ForeignKey(Analysis, on_delete=models.PROTECT, related_name="impurity_findings")
    name = models.CharField(max_length=120)
    verdict = models.CharField(max_length=30)
    estimate_fraction = models.FloatField(null=True)
    detection_limit_fraction = models.FloatField(null=True)
