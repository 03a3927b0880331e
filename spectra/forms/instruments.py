"""Forms of instruments, their accessories, qualification and checks."""

from __future__ import annotations

from django import forms
from django.utils import timezone

from spectra import selectors_master as selectors
from spectra.days import today
from spectra.models import Accessory, CheckVerdict, TechniqueChoices

from .fields import CHOOSE, CODE_HINT, LONGEST_TEXT, Code, Day, Moment, Sectioned, text_area

ACCESSORY_ROWS = 4


class InstrumentForm(Sectioned):
    sections = (("Instrument", "", ("code", "name", "serial")),)
    code = Code(label="Code", help_text=CODE_HINT)
    name = forms.CharField(label="Name", max_length=200)
    serial = forms.CharField(label="Serial number", max_length=80, required=False)


class AccessoryForm(forms.Form):
    code = Code(label="Code")
    name = forms.CharField(label="Name", max_length=200)
    technique = forms.ChoiceField(label="Technique", choices=CHOOSE + TechniqueChoices.choices)
    atr_crystal_index = forms.FloatField(label="Index of the crystal", min_value=1.3, max_value=4.5, required=False)
    atr_angle_deg = forms.FloatField(label="Angle / degrees", min_value=10, max_value=89, required=False)
    atr_reflections = forms.IntegerField(label="Reflections", min_value=1, max_value=100, required=False)

    def clean(self):
        cleaned = super().clean()
        for name in ("atr_crystal_index", "atr_angle_deg", "atr_reflections"):
            if cleaned.get("technique") == TechniqueChoices.ATR:
                if cleaned.get(name) is None and name not in self.errors:
                    self.add_error(name, "An ATR unit needs it.")
            elif cleaned.get("technique") and cleaned.get(name) is not None:
                self.add_error(name, "Leave it empty: only an ATR unit has a crystal.")
        return cleaned


class AccessoryRows(forms.BaseFormSet):
    def clean(self):
        codes = [form.cleaned_data["code"].casefold() for form in self.forms if form.cleaned_data.get("code")]
        if len(set(codes)) < len(codes):
            raise forms.ValidationError("Two accessories have the same code.")

    def values(self) -> list[dict[str, object]]:
        return [form.cleaned_data for form in self.forms if form.has_changed()]


AccessoryFormSet = forms.formset_factory(
    AccessoryForm,
    formset=AccessoryRows,
    min_num=1,
    extra=ACCESSORY_ROWS - 1,
    max_num=ACCESSORY_ROWS,
    absolute_max=ACCESSORY_ROWS,
    validate_min=True,
)


class QualificationForm(Sectioned):
    sections = (("Qualification", "", ("performed_on", "due_on", "occasion")),)
    performed_on = Day(label="Performed on")
    due_on = Day(label="Next one due on")
    occasion = forms.CharField(
        label="Occasion", max_length=120, help_text="Yearly, after repair, after a change of laser or source."
    )

    def clean_performed_on(self):
        day = self.cleaned_data["performed_on"]
        if day > today():
            raise forms.ValidationError("This day lies ahead.")
        return day


class CheckForm(Sectioned):
    """The outcome of a performance check, for one accessory."""

    sections = (("Check", "", ("performed_at", "verdict", "valid_until", "film", "note")),)
    performed_at = Moment(label="Performed at (UTC)")
    verdict = forms.ChoiceField(label="Verdict", choices=CHOOSE + CheckVerdict.choices)
    valid_until = Moment(
        label="Valid until (UTC)", help_text="Until when samples may be measured on the strength of it."
    )
    film = forms.FileField(
        label="Spectrum of the film",
        required=False,
        max_length=255,
        help_text="The exported file of the polystyrene film. Its bytes are kept unchanged.",
    )
    note = forms.CharField(
        label="Remark",
        max_length=LONGEST_TEXT,
        required=False,
        widget=text_area(),
        help_text="What was seen; for a failed check, what was done about it.",
    )

    def __init__(self, *args, accessory: Accessory, **kwargs):
        super().__init__(*args, **kwargs)
        now = timezone.now().replace(second=0, microsecond=0)
        self.initial = {
            "performed_at": now,
            "valid_until": selectors.usual_validity(accessory, begins=now),
            **self.initial,
        }

    def clean(self):
        cleaned = super().clean()
        if cleaned.get("verdict") in (CheckVerdict.FAILED, CheckVerdict.NOT_EVALUABLE) and not cleaned.get("note"):
            self.add_error("note", "Say what was seen when the check did not pass.")
        return cleaned
