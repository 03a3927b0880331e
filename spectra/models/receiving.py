"""What arrived and what is examined: delivery, container, sample, examination, and who had a hand in it."""

from __future__ import annotations

from django.conf import settings
from django.db import models

from spectra.models.master import MaterialVersion, Procedure


class Counter(models.Model):
    """The last number given out of a series (S-2026, D-2026, ...); read and raised under a lock."""

    series = models.CharField(max_length=20, primary_key=True)
    last = models.PositiveIntegerField(default=0)


class Priority(models.IntegerChoices):
    URGENT = 1, "urgent"
    NORMAL = 2, "normal"
    LOW = 3, "low"


class Delivery(models.Model):
    code = models.CharField(max_length=20, unique=True)
    material_version = models.ForeignKey(MaterialVersion, on_delete=models.PROTECT, related_name="deliveries")
    supplier = models.CharField(max_length=120)
    lot = models.CharField(max_length=80)
    received_on = models.DateField()
    due_on = models.DateField(null=True, blank=True)
    priority = models.PositiveSmallIntegerField(choices=Priority.choices, default=Priority.NORMAL)
    containers_total = models.PositiveIntegerField()
    containers_sampled = models.PositiveIntegerField()
    sampling_note = models.CharField(max_length=300, blank=True)
    registered_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    registered_at = models.DateTimeField()

    class Meta:
        verbose_name_plural = "deliveries"
        indexes = [models.Index(fields=["lot"], name="delivery_lot")]

    def __str__(self) -> str:
        return self.code


class Container(models.Model):
    delivery = models.ForeignKey(Delivery, on_delete=models.PROTECT, related_name="containers")
    number = models.PositiveIntegerField()
    label = models.CharField(max_length=80, blank=True)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["delivery", "number"], name="container_number")]
        ordering = ["number"]

    def __str__(self) -> str:
        return f"container {self.number}"


class SampleKind(models.TextChoices):
    INDIVIDUAL = "individual", "individual"
    COMPOSITE = "composite", "composite"


class Sample(models.Model):
    code = models.CharField(max_length=20, unique=True)
    delivery = models.ForeignKey(Delivery, on_delete=models.PROTECT, related_name="samples")
    containers = models.ManyToManyField(Container, related_name="samples")
    kind = models.CharField(max_length=12, choices=SampleKind.choices, default=SampleKind.INDIVIDUAL)
    form = models.CharField("appearance on receipt", max_length=120, blank=True)
    registered_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    registered_at = models.DateTimeField()

    def __str__(self) -> str:
        return self.code


class Examination(models.Model):
    """One identity test by infrared on samples of a delivery; the edition in force when it began governs."""

    code = models.CharField(max_length=20, unique=True)
    delivery = models.ForeignKey(Delivery, on_delete=models.PROTECT, related_name="examinations")
    samples = models.ManyToManyField(Sample, related_name="examinations")
    procedure = models.ForeignKey(Procedure, on_delete=models.PROTECT, related_name="examinations")
    opened_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    opened_at = models.DateTimeField()

    def __str__(self) -> str:
        return self.code


class ContributionKind(models.TextChoices):
    PREPARED = "prepared", "prepared the sample"
    MEASURED = "measured", "measured the spectrum"
    UPLOADED = "uploaded", "uploaded a file"
    EDITED_BAND = "edited_band", "edited a band"
    EXCLUDED = "excluded", "excluded a spectrum"
    CHANGED_ROLE = "changed_role", "changed a spectrum's role"
    CLAIMED = "claimed", "made or changed a claim"
    CONCLUDED = "concluded", "wrote the conclusion"
    ANSWERED = "answered", "answered a reviewer"


class Contribution(models.Model):
    """Whose own work an examination is: none of them may decide on it. Only ever added to."""

    examination = models.ForeignKey(Examination, on_delete=models.PROTECT, related_name="contributions")
    user = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    kind = models.CharField(max_length=20, choices=ContributionKind.choices)
    at = models.DateTimeField()

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["examination", "user", "kind"], name="contribution_once"),
        ]
