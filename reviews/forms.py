"""Forms of this layer: they turn text into values and say beside the field what is wrong. Services hold the rules."""

from __future__ import annotations

import re

from django import forms
from django.utils import timezone

from labsite.accounts.models import User
from spectra import selectors as spectra_selectors
from spectra.models import Accessory, MaterialVersion, Priority, SpectrumRole, TechniqueChoices

DATE = forms.DateInput(attrs={"type": "date"}, format="%Y-%m-%d")


class ContainerNumbers(forms.CharField):
    """`1, 3, 5-8` as the numbers of containers."""

    def clean(self, value):
        text = super().clean(value)
        numbers: set[int] = set()
        for part in re.split(r"[,;\s]+", text.strip()):
            span = re.fullmatch(r"(\d{1,4})(?:[-–](\d{1,4}))?", part)
            if not span:
                raise forms.ValidationError(f"“{part[:20]}” is not a container number: write for example 1, 3, 5-8.")
            first, last = int(span[1]), int(span[2] or span[1])
            if last < first:
                raise forms.ValidationError(f"“{part[:20]}” runs backwards.")
            numbers.update(range(first, last + 1))
        return sorted(numbers)


class DeliveryForm(forms.Form):
    material = forms.ModelChoiceField(
        MaterialVersion.objects.none(), label="Declared material", empty_label="choose", to_field_name="pk"
    )
    supplier = forms.CharField(max_length=120)
    lot = forms.CharField(max_length=80, label="Supplier's lot", help_text="As it stands on the label.")
    received_on = forms.DateField(label="Received on", widget=DATE)
    due_on = forms.DateField(label="Due on", widget=DATE, required=False)
    priority = forms.TypedChoiceField(choices=Priority.choices, coerce=int, initial=Priority.NORMAL)
    containers_total = forms.IntegerField(label="Containers in the delivery", min_value=1, max_value=500, initial=1)
    sampled_containers = ContainerNumbers(
        label="Containers sampled", initial="1", help_text="Their numbers: 1, 3, 5-8. Each becomes a sample."
    )
    composite = forms.BooleanField(label="One composite sample from all of them", required=False)
    form = forms.CharField(label="Appearance on receipt", max_length=120, required=False)

    def __init__(self, *args, **kwargs):
        super().__init__(*args, **kwargs)
        self.fields["material"].queryset = spectra_selectors.approved_material_versions()
        self.fields["received_on"].initial = timezone.now().date()


class UploadForm(forms.Form):
    """How the files of one upload were measured; what is left empty is taken from the procedure."""

    technique = forms.ChoiceField(choices=TechniqueChoices.choices, required=False)
    accessory = forms.ModelChoiceField(
        Accessory.objects.none(), required=False, empty_label="the one for the technique", label="Measured on"
    )
    measured_by = forms.ModelChoiceField(User.objects.none(), required=False, empty_label="me", label="Measured by")
    prepared_by = forms.ModelChoiceField(User.objects.none(), required=False, empty_label="me", label="Prepared by")
    already_processed = forms.CharField(
        max_length=300,
        required=False,
        label="Already processed before export",
        help_text="Depth scaling, baseline, smoothing, vapour subtraction; leave empty if nothing was done.",
    )

    def __init__(self, *args, technique: str = "", **kwargs):
        super().__init__(*args, **kwargs)
        self.fields["technique"].initial = technique
        self.fields["accessory"].queryset = spectra_selectors.accessories()
        people = User.objects.filter(is_active=True).order_by("printed_name")
        for name in ("measured_by", "prepared_by"):
            self.fields[name].queryset = people
            self.fields[name].label_from_instance = lambda person: person.printed_name


class AnswerForm(forms.Form):
    """The answer to what a file leaves open: its axis unit, its ordinate, or which columns are spectra.

    `question` is what the reader asked. A file that does not name its axis seldom names its ordinate either, so that
    may be answered in the same step.
    """

    x_unit = forms.ChoiceField(
        label="The first column is in",
        choices=[("", "choose"), ("cm-1", "cm⁻¹"), ("um", "micrometres"), ("nm", "nanometres")],
    )
    ordinate = forms.ChoiceField(
        label="The values are",
        choices=[
            ("", "as the file says"),
            ("absorbance", "absorbance"),
            ("transmittance", "transmittance as a fraction (1 is everything)"),
            ("percent_transmittance", "transmittance in per cent"),
            ("reflectance", "reflectance as a fraction"),
        ],
        required=False,
    )
    columns = forms.CharField(
        label="Columns that are spectra",
        help_text="Their numbers, counted from the left; column 1 holds the axis. For example 2, 3.",
    )

    ASKED = {"x_unit": ("x_unit", "ordinate"), "ordinate": ("ordinate",), "columns": ("columns",)}

    def __init__(self, *args, question: str, **kwargs):
        super().__init__(*args, **kwargs)
        for name in set(self.fields) - set(self.ASKED.get(question, ())):
            del self.fields[name]
        if question == "ordinate":
            self.fields["ordinate"].required = True
            self.fields["ordinate"].choices = [("", "choose"), *self.fields["ordinate"].choices[1:]]

    def clean_columns(self):
        text = self.cleaned_data["columns"].strip()
        parts = re.split(r"[,;\s]+", text)
        if not all(re.fullmatch(r"[0-9]{1,3}", part) and int(part) > 0 for part in parts):
            raise forms.ValidationError("Write column numbers, for example 2, 3.")
        return [int(part) for part in parts]


class RoleForm(forms.Form):
    role = forms.ChoiceField(choices=[choice for choice in SpectrumRole.choices if choice[0] != "repeat"], label="Role")
    reason = forms.CharField(widget=forms.Textarea(attrs={"rows": 2}), max_length=2000, label="Reason", required=False)
