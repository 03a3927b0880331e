"""Forms of procedures, method versions and the group table."""

from __future__ import annotations

import json

from django import forms

from spectra import selectors_master as selectors
from spectra.days import today
from spectra.models import MethodVersion, Procedure, TechniqueChoices

from .fields import CHOOSE, LONGEST_TEXT, Code, Day, Sectioned, text_area

LONGEST_TABLE = 1_000_000  # characters, of a pasted or uploaded table
LARGEST_TEXT_FILE = 2 * LONGEST_TABLE  # bytes


class ProcedureForm(Sectioned):
    """An edition of a procedure. `number` is asked only for a new procedure."""

    sections = (
        ("The written test", "", ("number", "title", "effective_from", "method")),
        ("Measurement", "", ("technique", "preparation", "accessory_text")),
        (
            "Attenuated total reflection",
            "Needed for that technique only: depth scaling uses them.",
            ("atr_crystal_index", "atr_angle_deg", "atr_reflections"),
        ),
        ("Range and resolution", "", ("low_cm1", "high_cm1", "resolution_cm1", "scans", "repeats")),
        (
            "Acceptance",
            "",
            ("missing_bands_allowed", "extra_bands_allowed", "size_order_required", "solid_state_repeat"),
        ),
    )

    number = Code(label="Number", help_text="The laboratory's own number of the written test.")
    title = forms.CharField(label="Title", max_length=200)
    effective_from = Day(label="Effective from", help_text="Examinations begun from this day on follow this edition.")
    method = forms.ModelChoiceField(
        MethodVersion.objects.none(),
        label="Method version",
        empty_label="choose",
        help_text="The approved set of numeric parameters that reads the spectra.",
    )
    technique = forms.ChoiceField(label="Technique", choices=CHOOSE + TechniqueChoices.choices)
    preparation = forms.CharField(
        label="Preparation",
        max_length=LONGEST_TEXT,
        required=False,
        widget=text_area(),
        help_text="Amount, grinding, drying, background, what to look at before measuring.",
    )
    accessory_text = forms.CharField(
        label="Crystal, window or path",
        max_length=200,
        required=False,
        help_text="For example: 0.1 mm cell, BaF₂ windows.",
    )
    atr_crystal_index = forms.FloatField(
        label="Refractive index of the crystal",
        min_value=1.3,
        max_value=4.5,
        required=False,
        help_text="Diamond and zinc selenide 2.40, germanium 4.00.",
    )
    atr_angle_deg = forms.FloatField(label="Angle of incidence / degrees", min_value=10, max_value=89, required=False)
    atr_reflections = forms.IntegerField(label="Number of reflections", min_value=1, max_value=100, required=False)
    low_cm1 = forms.FloatField(label="Lowest wavenumber / cm⁻¹", min_value=10, max_value=15000, initial=650)
    high_cm1 = forms.FloatField(label="Highest wavenumber / cm⁻¹", min_value=10, max_value=15000, initial=4000)
    resolution_cm1 = forms.FloatField(label="Resolution / cm⁻¹", min_value=0.05, max_value=64, initial=4)
    scans = forms.IntegerField(label="Scans", min_value=1, max_value=100000, required=False, initial=32)
    repeats = forms.IntegerField(
        label="Measurements of each sample",
        min_value=1,
        max_value=20,
        initial=1,
        help_text="Fixed here beforehand, so that nobody measures until it fits.",
    )
    missing_bands_allowed = forms.IntegerField(
        label="Reference bands that may be missing", min_value=0, max_value=50, initial=0
    )
    extra_bands_allowed = forms.IntegerField(
        label="Bands beyond the reference that may appear", min_value=0, max_value=50, initial=0
    )
    size_order_required = forms.BooleanField(
        label="The bands must keep the reference's order of size", required=False, initial=True
    )
    solid_state_repeat = forms.BooleanField(
        label="When the solid forms differ, recrystallise sample and reference alike and repeat", required=False
    )

    def __init__(self, *args, edition: Procedure | None = None, **kwargs):
        super().__init__(*args, **kwargs)
        if edition is not None:
            del self.fields["number"]
            kept = {name: getattr(edition, name) for name in self.fields if name not in ("method", "effective_from")}
            self.initial = {**kept, "method": edition.method_id, **self.initial}
        self.initial.setdefault("effective_from", today())
        approved = selectors.approved_methods()
        self.fields["method"].queryset = approved
        self.fields["method"].label_from_instance = lambda row: f"version {row.number}: {row.name}"
        newest = approved.first()
        if newest is not None:
            self.initial.setdefault("method", newest.pk)

    def clean(self):
        cleaned = super().clean()
        atr = ("atr_crystal_index", "atr_angle_deg", "atr_reflections")
        technique = cleaned.get("technique")
        for name in atr:
            given = cleaned.get(name) is not None
            if technique == TechniqueChoices.ATR and not given and name not in self.errors:
                self.add_error(name, "This technique needs it.")
            elif technique and technique != TechniqueChoices.ATR and given:
                self.add_error(name, "Leave it empty: the chosen technique has no crystal.")
        low, high = cleaned.get("low_cm1"), cleaned.get("high_cm1")
        if low is not None and high is not None and low >= high:
            self.add_error("low_cm1", "The range must begin below its end.")
        return cleaned

    def values(self) -> dict[str, object]:
        values = {name: value for name, value in self.cleaned_data.items() if name not in ("number", "method")}
        return {**values, "method_id": self.cleaned_data["method"].pk}


class TextOrFileForm(Sectioned):
    """A long text, pasted or from a file; exactly one of the two."""

    text = forms.CharField(
        required=False,
        strip=False,
        max_length=LONGEST_TABLE,
        widget=forms.Textarea(attrs={"rows": 18, "spellcheck": "false", "class": "code-text"}),
    )
    file = forms.FileField(
        label="Or a file", required=False, max_length=255, help_text="A chosen file counts, not the text."
    )

    def clean(self):
        cleaned = super().clean()
        file = cleaned.get("file")
        if file is not None:
            if file.size > LARGEST_TEXT_FILE:
                self.add_error("file", f"It is larger than {LARGEST_TEXT_FILE // 1_000_000} MB.")
                return cleaned
            try:
                cleaned["text"] = file.read().decode("utf-8-sig")
            except UnicodeDecodeError as error:
                self.add_error("file", f"It is not UTF-8 text: byte {error.start + 1} does not fit.")
        elif not cleaned.get("text", "").strip() and "file" not in self.errors:
            self.add_error("text", "Paste the text or choose a file.")
        return cleaned


class GroupTableForm(TextOrFileForm):
    sections = (("The table", "Edited as text; the first mistake is named by its group and band.", ("text", "file")),)

    def __init__(self, *args, **kwargs):
        super().__init__(*args, **kwargs)
        self.fields["text"].label = "Text of the table"


class MethodForm(TextOrFileForm):
    sections = (
        ("Method", "", ("name",)),
        ("Parameters", "As JSON: each name with its number. Names carry their units.", ("text", "file")),
    )
    name = forms.CharField(label="Name", max_length=120, help_text="What it is for, or what is different about it.")

    def __init__(self, *args, **kwargs):
        super().__init__(*args, **kwargs)
        self.fields["text"].label = "Parameters"

    def clean(self):
        cleaned = super().clean()
        if cleaned.get("text", "").strip() and not self.errors:
            try:
                cleaned["parameters"] = json.loads(cleaned["text"], parse_constant=_no_constant)
            except (ValueError, RecursionError) as error:
                self.add_error("text", f"This is not valid JSON: {error}.")
            else:
                if not isinstance(cleaned["parameters"], dict):
                    self.add_error("text", "Write one JSON object: names with their numbers in braces.")
        return cleaned


def _no_constant(name: str) -> None:
    raise ValueError(f"{name} is not a number that can be used")
