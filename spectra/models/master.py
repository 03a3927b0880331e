"""Master data: materials, procedures, methods, the group table, watch lists, references. Versioned and approved.

A version is edited only while it is a draft. Approval is by somebody other than its author and signs the hash of its
content; from then on a change is a new version.
"""

from __future__ import annotations

from django.conf import settings
from django.db import models
from django.db.models import F, Q


class ApprovalState(models.TextChoices):
    DRAFT = "draft", "draft"
    APPROVED = "approved", "approved"
    RETIRED = "retired", "retired"


class Approvable(models.Model):
    """The columns that every approved record shares."""

    state = models.CharField(max_length=10, choices=ApprovalState.choices, default=ApprovalState.DRAFT)
    author = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    created_at = models.DateTimeField()
    content_hash = models.CharField(max_length=64, blank=True)
    approved_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    approved_at = models.DateTimeField(null=True)
    approval = models.ForeignKey("signing.Signature", on_delete=models.PROTECT, null=True, related_name="+")

    class Meta:
        abstract = True


def approved_by_another(name: str) -> models.CheckConstraint:
    """The database's own statement that nobody approves what they wrote."""
    return models.CheckConstraint(
        condition=Q(approved_by__isnull=True) | ~Q(approved_by=F("author")), name=f"{name}_approved_by_another"
    )


class TechniqueChoices(models.TextChoices):
    TRANSMISSION = "transmission", "film or cell in transmission"
    DISC = "disc", "disc in potassium bromide or chloride"
    MULL = "mull", "mull"
    ATR = "atr", "attenuated total reflection"
    DIFFUSE = "diffuse", "diffuse reflectance"
    GAS_CELL = "gas_cell", "gas cell"


class PhaseChoices(models.TextChoices):
    LIQUID = "liquid", "liquid"
    SOLID = "solid", "solid"
    FILM = "film", "film"
    SOLUTION = "solution", "solution"
    GAS = "gas", "gas"


class MethodVersion(Approvable):
    """All numeric parameters of the reading, as canonical JSON."""

    number = models.PositiveIntegerField(unique=True)
    name = models.CharField(max_length=120)
    parameters = models.JSONField()
    digest = models.CharField(max_length=64)
    core_version = models.CharField(max_length=40)

    class Meta:
        constraints = [approved_by_another("method")]

    def __str__(self) -> str:
        return f"method version {self.number}"


class GroupTable(Approvable):
    """One version of the table of group frequencies with its rules, as the text a chemist edits."""

    number = models.PositiveIntegerField(unique=True)
    text = models.TextField()
    digest = models.CharField(max_length=64)

    class Meta:
        constraints = [approved_by_another("group_table")]

    def __str__(self) -> str:
        return f"group table version {self.number}"


class Procedure(Approvable):
    """One edition of the laboratory's written test."""

    number = models.CharField(max_length=40)
    edition = models.PositiveIntegerField()
    title = models.CharField(max_length=200)
    effective_from = models.DateField()
    technique = models.CharField(max_length=20, choices=TechniqueChoices.choices)
    preparation = models.TextField(blank=True)
    accessory_text = models.CharField("crystal, window or path", max_length=200, blank=True)
    atr_crystal_index = models.FloatField(null=True, blank=True)
    atr_angle_deg = models.FloatField(null=True, blank=True)
    atr_reflections = models.PositiveIntegerField(null=True, blank=True)
    low_cm1 = models.FloatField()
    high_cm1 = models.FloatField()
    resolution_cm1 = models.FloatField()
    scans = models.PositiveIntegerField(null=True, blank=True)
    repeats = models.PositiveIntegerField(default=1)
    missing_bands_allowed = models.PositiveIntegerField(default=0)
    extra_bands_allowed = models.PositiveIntegerField(default=0)
    size_order_required = models.BooleanField(default=True)
    solid_state_repeat = models.BooleanField(default=False)
    method = models.ForeignKey(MethodVersion, on_delete=models.PROTECT)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["number", "edition"], name="procedure_edition"),
            approved_by_another("procedure"),
        ]

    def __str__(self) -> str:
        return f"{self.number}, edition {self.edition}"


class Material(models.Model):
    """The thing that stays the same while its versions follow each other."""

    code = models.CharField(max_length=40, unique=True)
    created_at = models.DateTimeField()

    def __str__(self) -> str:
        return self.code


class ReviewMode(models.TextChoices):
    OPEN = "open", "open: the reviewer sees the proposal at once"
    BLIND = "blind", "blind: the reviewer records an own reading first"


class MaterialVersion(Approvable):
    """What a delivery is declared to be, and what its infrared test can and cannot show."""

    material = models.ForeignKey(Material, on_delete=models.PROTECT, related_name="versions")
    number = models.PositiveIntegerField()
    name = models.CharField(max_length=200)
    formula = models.CharField(max_length=120, blank=True)
    smiles = models.CharField(max_length=1000, blank=True)
    repeat_unit = models.CharField(max_length=1000, blank=True)
    composition_note = models.CharField("hydrate, counter-ion or mixture", max_length=300, blank=True)
    phase = models.CharField(max_length=10, choices=PhaseChoices.choices)
    expected_groups = models.JSONField(default=list, blank=True)
    forbidden_groups = models.JSONField(default=list, blank=True)
    not_separable_from = models.JSONField(default=list, blank=True)
    companion_tests = models.JSONField(default=list, blank=True)
    cautions = models.JSONField(default=list, blank=True)
    acceptance = models.TextField(blank=True)
    review_mode = models.CharField(max_length=10, choices=ReviewMode.choices, default=ReviewMode.OPEN)
    procedure_number = models.CharField(max_length=40)
    watch_list = models.ForeignKey("spectra.WatchList", on_delete=models.PROTECT, null=True, blank=True)
    # Account numbers of everybody who changed the draft: none of them may approve it, nor may the author.
    edited_by = models.JSONField(default=list, blank=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["material", "number"], name="material_version_number"),
            models.UniqueConstraint(
                fields=["material"], condition=Q(state="approved"), name="one_approved_version_of_a_material"
            ),
            approved_by_another("material"),
        ]

    def __str__(self) -> str:
        return self.name


class WatchList(Approvable):
    """The contaminants that a material is screened for."""

    code = models.CharField(max_length=40)
    number = models.PositiveIntegerField()
    title = models.CharField(max_length=200)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["code", "number"], name="watch_list_version"),
            approved_by_another("watch_list"),
        ]

    def __str__(self) -> str:
        return f"{self.title}, version {self.number}"


class WatchItem(models.Model):
    watch_list = models.ForeignKey(WatchList, on_delete=models.PROTECT, related_name="items")
    name = models.CharField(max_length=120)
    reference = models.ForeignKey("spectra.Reference", on_delete=models.PROTECT)

    class Meta:
        constraints = [models.UniqueConstraint(fields=["watch_list", "name"], name="watch_item_once")]


class Reference(Approvable):
    """A spectrum of an authenticated standard: the standard's expiry and the spectrum's validity are two dates."""

    code = models.CharField(max_length=40, unique=True)
    material = models.ForeignKey(Material, on_delete=models.PROTECT, null=True, related_name="references")
    name = models.CharField(max_length=200)
    standard_lot = models.CharField(max_length=80)
    certificate = models.CharField(max_length=120, blank=True)
    standard_received_on = models.DateField(null=True, blank=True)
    standard_expires_on = models.DateField(null=True, blank=True)
    spectrum_valid_until = models.DateField(null=True, blank=True)
    technique = models.CharField(max_length=20, choices=TechniqueChoices.choices)
    phase = models.CharField(max_length=10, choices=PhaseChoices.choices)
    instrument = models.ForeignKey("spectra.Instrument", on_delete=models.PROTECT, null=True, blank=True)
    resolution_cm1 = models.FloatField(null=True, blank=True)
    atr_crystal_index = models.FloatField(null=True, blank=True)
    atr_angle_deg = models.FloatField(null=True, blank=True)
    atr_reflections = models.PositiveIntegerField(null=True, blank=True)
    raw_file = models.ForeignKey("spectra.RawFile", on_delete=models.PROTECT)
    file_name = models.CharField(max_length=255)
    block_index = models.PositiveIntegerField(default=0)
    answers = models.JSONField(default=dict, blank=True)
    superseded_by = models.ForeignKey("self", on_delete=models.PROTECT, null=True, blank=True)

    class Meta:
        constraints = [approved_by_another("reference")]

    def __str__(self) -> str:
        return f"{self.code} {self.name}"
