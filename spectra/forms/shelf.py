"""The form by which a reference spectrum comes on to the shelf."""

from __future__ import annotations

import re

from django import forms

from spectra import selectors_master as selectors
from spectra.days import today
from spectra.models import Instrument, Material, PhaseChoices, TechniqueChoices
from spectra.selectors import materials as all_materials

from .fields import CHOOSE, CODE_HINT, Code, Day, Sectioned

ATR_FIELDS = ("atr_crystal_index", "atr_angle_deg", "atr_reflections")


class ReferenceForm(Sectioned):
    """A spectrum for the shelf. The last part answers what a file may leave open."""

    sections = (
        ("The spectrum", "", ("file", "technique", "phase", "instrument", "resolution_cm1")),
        (
            "The crystal, for attenuated total reflection",
            "Leave empty for any other technique.",
            ("atr_crystal_index", "atr_angle_deg", "atr_reflections"),
        ),
        ("What it is of", "", ("code", "name", "material")),
        (
            "The standard that was measured",
            "The standard's own expiry and the validity of its spectrum are two dates.",
            ("standard_lot", "certificate", "standard_received_on", "standard_expires_on", "spectrum_valid_until"),
        ),
        (
            "If the file leaves something open",
            "Needed only when reading it asks for one of these.",
            ("block_index", "x_unit", "ordinate", "columns"),
        ),
        (
            "If the file's header is wrong",
            "What its header states is held against what you state: the state of the sample, resolution, date.",
            ("header_wrong", "header_contradicted"),
        ),
    )

    file = forms.FileField(
        label="File",
        max_length=255,
        help_text="JCAMP-DX or text in columns, as the instrument exported it. The bytes are kept unchanged.",
    )
    technique = forms.ChoiceField(label="Technique", choices=CHOOSE + TechniqueChoices.choices)
    phase = forms.ChoiceField(label="Measured as", choices=CHOOSE + PhaseChoices.choices)
    instrument = forms.ModelChoiceField(
        Instrument.objects.none(),
        required=False,
        label="Instrument",
        empty_label="not one of ours",
        help_text="Where it was measured.",
    )
    resolution_cm1 = forms.FloatField(label="Resolution / cm⁻¹", min_value=0.05, max_value=64, required=False)
    atr_crystal_index = forms.FloatField(
        label="Refractive index of the crystal", min_value=1.01, max_value=6, required=False
    )
    atr_angle_deg = forms.FloatField(label="Angle of incidence / degrees", min_value=10, max_value=89, required=False)
    atr_reflections = forms.IntegerField(label="Number of reflections", min_value=1, max_value=100, required=False)
    code = Code(label="Code", help_text=CODE_HINT)
    name = forms.CharField(label="Name of the standard", max_length=200)
    material = forms.ModelChoiceField(
        Material.objects.none(),
        required=False,
        label="Reference of this material",
        empty_label="none: a contaminant or look-alike",
        help_text="The link is not made later, so enter a new material before its reference.",
    )
    standard_lot = forms.CharField(label="Lot of the standard", max_length=80)
    certificate = forms.CharField(label="Certificate", max_length=120, required=False, help_text="Its number or place.")
    standard_received_on = Day(label="Standard received on", required=False)
    standard_expires_on = Day(label="Standard expires on", required=False)
    spectrum_valid_until = Day(
        label="Spectrum valid until", required=False, help_text="After this day it is measured again."
    )
    block_index = forms.IntegerField(
        label="Which spectrum of the file",
        min_value=1,
        max_value=10000,
        required=False,
        help_text="Its place in the file, counted from 1.",
    )
    x_unit = forms.ChoiceField(
        label="The first column is in",
        required=False,
        choices=[("", "as the file says"), ("cm-1", "cm⁻¹"), ("um", "micrometres"), ("nm", "nanometres")],
    )
    ordinate = forms.ChoiceField(
        label="The values are",
        required=False,
        choices=[
            ("", "as the file says"),
            ("absorbance", "absorbance"),
            ("transmittance", "transmittance as a fraction (1 is everything)"),
            ("percent_transmittance", "transmittance in per cent"),
            ("reflectance", "reflectance as a fraction"),
        ],
    )
    columns = forms.CharField(
        label="Column that is the spectrum",
        max_length=20,
        required=False,
        help_text="Counted from 1, where column 1 holds the wavenumbers.",
    )

    header_wrong = forms.BooleanField(label="The file's header is wrong", required=False)
    header_contradicted = forms.CharField(
        label="because",
        max_length=300,
        required=False,
        help_text="Kept with the reference, shown to whoever approves it, and recorded.",
    )

    def __init__(self, *args, **kwargs):
        super().__init__(*args, **kwargs)
        self.fields["instrument"].queryset = selectors.instruments_in_service()
        self.fields["material"].queryset = all_materials()
        self.fields["material"].label_from_instance = _code_and_name

    def clean_columns(self):
        text = self.cleaned_data["columns"].strip()
        if not text:
            return []
        if not re.fullmatch(r"\d{1,3}", text) or int(text) < 2:
            raise forms.ValidationError("Write one column number, 2 or more.")
        return [int(text)]

    def clean(self):
        cleaned = super().clean()
        received, expires = cleaned.get("standard_received_on"), cleaned.get("standard_expires_on")
        if received and received > today():
            self.add_error("standard_received_on", "This day lies ahead.")
        if received and expires and expires <= received:
            self.add_error("standard_expires_on", "It must expire after it was received.")
        if cleaned.get("technique") and cleaned["technique"] != TechniqueChoices.ATR:
            for name in ATR_FIELDS:
                if cleaned.get(name) is not None:
                    self.add_error(name, "Leave it empty: the chosen technique has no crystal.")
        wrong, why = cleaned.get("header_wrong"), (cleaned.get("header_contradicted") or "").strip()
        if wrong and not why:
            self.add_error("header_contradicted", "Say why the header is wrong.")
        if why and not wrong:
            self.add_error("header_wrong", "Tick this too, or take the reason away.")
        return cleaned

    def values(self) -> dict[str, object]:
        data = self.cleaned_data
        names = (
            "technique",
            "phase",
            "resolution_cm1",
            *ATR_FIELDS,
            "standard_lot",
            "certificate",
            "standard_received_on",
            "standard_expires_on",
            "spectrum_valid_until",
        )
        values: dict[str, object] = {name: data[name] for name in names}
        values["instrument_id"] = data["instrument"].pk if data["instrument"] else None
        answered = ("x_unit", "ordinate", "columns", "header_contradicted")
        values["answers"] = {name: data[name] for name in answered if data[name]}
        if data["block_index"]:
            values["block_index"] = data["block_index"] - 1
        return values


def _code_and_name(material: Material) -> str:
    newest = next(iter(material.versions.all()), None)
    return f"{material.code} {newest.name}" if newest else material.code
