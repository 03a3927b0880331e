"""Instruments, their accessories, qualification and the checks that make a measurement count; competence of people."""

from __future__ import annotations

from django.conf import settings
from django.db import models

from spectra.models.master import TechniqueChoices


class Instrument(models.Model):
    code = models.CharField(max_length=40, unique=True)
    name = models.CharField(max_length=200)
    serial = models.CharField(max_length=80, blank=True)
    in_service = models.BooleanField(default=True)
    registered_at = models.DateTimeField()

    def __str__(self) -> str:
        return self.code


class Accessory(models.Model):
    instrument = models.ForeignKey(Instrument, on_delete=models.PROTECT, related_name="accessories")
    code = models.CharField(max_length=40)
    name = models.CharField(max_length=200)
    technique = models.CharField(max_length=20, choices=TechniqueChoices.choices)
    atr_crystal_index = models.FloatField(null=True, blank=True)
    atr_angle_deg = models.FloatField(null=True, blank=True)
    atr_reflections = models.PositiveIntegerField(null=True, blank=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["instrument", "code"], name="accessory_code")]
        verbose_name_plural = "accessories"

    def __str__(self) -> str:
        return f"{self.instrument.code} / {self.name}"


class Qualification(models.Model):
    """Yearly, after repair, after a change of laser or source."""

    instrument = models.ForeignKey(Instrument, on_delete=models.PROTECT, related_name="qualifications")
    performed_on = models.DateField()
    due_on = models.DateField()
    occasion = models.CharField(max_length=120)
    recorded_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")


class CheckVerdict(models.TextChoices):
    PASSED = "passed", "passed"
    FAILED = "failed", "failed"
    NOT_EVALUABLE = "not_evaluable", "not evaluable"


class InstrumentCheck(models.Model):
    """A polystyrene film judged against its bands, for one accessory; valid for a set time."""

    accessory = models.ForeignKey(Accessory, on_delete=models.PROTECT, related_name="checks")
    performed_at = models.DateTimeField()
    valid_until = models.DateTimeField()
    verdict = models.CharField(max_length=20, choices=CheckVerdict.choices)
    raw_file = models.ForeignKey("spectra.RawFile", on_delete=models.PROTECT, null=True, blank=True)
    results = models.JSONField(default=dict, blank=True)
    note = models.TextField(blank=True)
    recorded_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    recorded_at = models.DateTimeField()

    class Meta:
        indexes = [models.Index(fields=["accessory", "-performed_at"], name="latest_check")]


class Activity(models.TextChoices):
    ANALYSE = "analyse", "analyse"
    REVIEW = "review", "review"


class Competence(models.Model):
    """Who may analyse or review which materials and techniques, until when, on which evidence."""

    user = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="competences")
    activity = models.CharField(max_length=10, choices=Activity.choices)
    material = models.ForeignKey("spectra.Material", on_delete=models.PROTECT, null=True, blank=True)
    technique = models.CharField(max_length=20, choices=TechniqueChoices.choices, blank=True)
    valid_until = models.DateField()
    evidence = models.CharField(max_length=200)
    recorded_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    recorded_at = models.DateTimeField()
