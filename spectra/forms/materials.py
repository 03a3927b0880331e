"""Forms of materials and of watch lists."""

from __future__ import annotations

from collections.abc import Iterable

from django import forms
from django.forms.utils import ErrorDict

from spectra import selectors_master as selectors
from spectra.models import MaterialVersion, PhaseChoices, Reference, ReviewMode, WatchList
from spectra.services.master import OFFERED_REVIEW_MODES

from .fields import CHOOSE, CODE_HINT, LONGEST_TEXT, Code, Lines, Sectioned, SelectSome, text_area


class MaterialForm(Sectioned):
    """A material's version. `code` is asked only for a new material, `reason` only for a changed draft."""

    sections = (
        ("Identity", "", ("code", "name", "formula", "composition_note", "phase")),
        (
            "Structure",
            "Written as SMILES. It is checked when you save; the button below shows how it is read.",
            ("smiles", "repeat_unit"),
        ),
        (
            "Functional groups",
            "Groups of the approved table. Expected ones must be found; forbidden ones must not.",
            ("expected_groups", "forbidden_groups"),
        ),
        ("Test", "", ("procedure_number", "watch_list", "acceptance", "review_mode")),
        (
            "Limits of the infrared test",
            "Shown with every conclusion. One item a line.",
            ("not_separable_from", "companion_tests", "cautions"),
        ),
        ("Why it changes", "", ("reason",)),
    )

    code = Code(label="Code", help_text=CODE_HINT + " It stays the same through all versions.")
    name = forms.CharField(label="Declared name", max_length=200, help_text="As suppliers' labels and orders have it.")
    formula = forms.CharField(
        label="Molecular formula",
        max_length=120,
        required=False,
        help_text="For example C8H10N4O2. Left empty, it is taken from the structure.",
    )
    composition_note = forms.CharField(
        label="Hydrate, counter-ion or mixture",
        max_length=300,
        required=False,
        help_text="What the name alone does not say: monohydrate, sodium salt, 60 % in water.",
    )
    phase = forms.ChoiceField(
        label="Measured as",
        choices=CHOOSE + PhaseChoices.choices,
        help_text="The state in which its spectrum is taken; groups absorb elsewhere in a gas.",
    )
    smiles = forms.CharField(
        label="Structure",
        max_length=1000,
        required=False,
        help_text="SMILES of the whole compound, parts of a salt or hydrate joined by a dot.",
        widget=forms.TextInput(attrs={"autocomplete": "off", "spellcheck": "false", "autocapitalize": "none"}),
    )
    repeat_unit = forms.CharField(
        label="Repeat unit",
        max_length=1000,
        required=False,
        help_text="For a polymer, in place of the structure: SMILES with * at both ends, as in *CCO*.",
        widget=forms.TextInput(attrs={"autocomplete": "off", "spellcheck": "false", "autocapitalize": "none"}),
    )
    expected_groups = forms.MultipleChoiceField(
        label="Expected",
        required=False,
        widget=forms.CheckboxSelectMultiple,
        help_text="Groups that this material has and whose bands its spectrum shows.",
    )
    forbidden_groups = forms.MultipleChoiceField(
        label="Forbidden",
        required=False,
        widget=forms.CheckboxSelectMultiple,
        help_text="Groups whose presence would mean another material or a contaminant.",
    )
    procedure_number = forms.ChoiceField(
        label="Procedure", help_text="The edition in force on the day of the examination governs it."
    )
    watch_list = forms.ModelChoiceField(
        WatchList.objects.none(),
        required=False,
        label="Watch list",
        empty_label="none: nothing is screened for",
        help_text="Contaminants to look for in every lot.",
    )
    acceptance = forms.CharField(
        label="Acceptance limits",
        max_length=LONGEST_TEXT,
        required=False,
        widget=text_area(),
        help_text="When does identity by infrared comply? In the words of the specification.",
    )
    review_mode = forms.ChoiceField(
        label="Second reading",
        choices=[
            (mode.value, mode.label if mode in OFFERED_REVIEW_MODES else f"{mode.label} (not offered yet)")
            for mode in ReviewMode
        ],
        initial=ReviewMode.OPEN,
        widget=SelectSome(kept_back={mode.value for mode in ReviewMode if mode not in OFFERED_REVIEW_MODES}),
        help_text="The blind reading is not offered yet.",
    )
    not_separable_from = Lines(
        label="Cannot be told apart from", help_text="Materials with the same infrared spectrum."
    )
    companion_tests = Lines(label="Companion tests", help_text="Tests that must stand beside the infrared spectrum.")
    cautions = Lines(label="Cautions", help_text="What a reader of the conclusion must not overlook.")
    reason = forms.CharField(
        label="Reason for the change", max_length=500, required=False, help_text="Kept in the audit trail."
    )

    def __init__(self, *args, version: MaterialVersion | None = None, changing: bool = False, **kwargs):
        super().__init__(*args, **kwargs)
        if version is not None:
            del self.fields["code"]
            self.initial = (
                {name: getattr(version, name) for name in self.fields if name not in ("reason", "watch_list")}
                | {"watch_list": version.watch_list_id}
                | self.initial
            )
        if not changing:
            del self.fields["reason"]
        groups = selectors.groups_to_choose()
        known = {identifier for identifier, _ in groups}
        for name in ("expected_groups", "forbidden_groups"):
            # A group that left the table stays visible until somebody takes it away.
            gone = [(one, f"{one} (not in the table)") for one in self.initial.get(name, ()) if one not in known]
            self.fields[name].choices = groups + gone
        numbers = selectors.procedures_to_choose()
        held = self.initial.get("procedure_number")
        if held and held not in dict(numbers):
            numbers.append((held, f"{held} (no approved edition)"))
        self.fields["procedure_number"].choices = CHOOSE + numbers
        self.fields["watch_list"].queryset = selectors.watch_lists_to_choose()

    def leave_unjudged(self) -> None:
        """Show what was typed without judging it: nobody asked to save it yet."""
        self._errors = ErrorDict()

    def take_groups(self, found: Iterable[str]) -> list[str]:
        """Tick `found` under Expected before anything is judged; returns the names of those newly ticked."""
        choices = dict(self.fields["expected_groups"].choices)
        ticked = self.data.getlist("expected_groups")
        new = [one for one in found if one in choices and one not in ticked]
        self.data = self.data.copy()
        self.data.setlist("expected_groups", [*ticked, *new])
        return [choices[one] for one in new]

    def clean(self):
        cleaned = super().clean()
        both = set(cleaned.get("expected_groups", ())) & set(cleaned.get("forbidden_groups", ()))
        if both:
            names = dict(self.fields["expected_groups"].choices)
            text = ", ".join(sorted(names[one] for one in both))
            self.add_error("forbidden_groups", f"Expected and forbidden at once: {text}.")
        if cleaned.get("smiles") and cleaned.get("repeat_unit"):
            self.add_error("repeat_unit", "Give the structure or the repeat unit, not both.")
        if not cleaned.get("formula") and cleaned.get("smiles"):
            drawn = selectors.structure_facts(cleaned["smiles"]).drawn
            cleaned["formula"] = drawn.formula if drawn else ""
        return cleaned

    def values(self) -> dict[str, object]:
        values = {
            name: value for name, value in self.cleaned_data.items() if name not in ("code", "reason", "watch_list")
        }
        chosen = self.cleaned_data["watch_list"]
        return {**values, "watch_list_id": chosen.pk if chosen else None}


class RetireForm(forms.Form):
    reason = forms.CharField(label="Why it is retired", max_length=500, help_text="Kept in the audit trail.")


class WatchListForm(Sectioned):
    """A watch list. `code` is asked only for a new one."""

    sections = (
        ("Watch list", "", ("code", "title")),
        ("Contaminants", "Choose references measured by the technique of the material's procedure.", ("references",)),
    )
    code = Code(label="Code", help_text=CODE_HINT)
    title = forms.CharField(label="Title", max_length=200, help_text="For which materials and technique.")
    references = forms.ModelMultipleChoiceField(
        Reference.objects.none(), label="Approved references", widget=forms.CheckboxSelectMultiple
    )

    def __init__(self, *args, watch_list: WatchList | None = None, **kwargs):
        super().__init__(*args, **kwargs)
        self.names: dict[int, str] = {}
        if watch_list is not None:
            del self.fields["code"]
            items = list(watch_list.items.all())
            self.names = {item.reference_id: item.name for item in items}
            self.initial = {"title": watch_list.title, "references": list(self.names), **self.initial}
        field = self.fields["references"]
        field.queryset = selectors.references_to_choose()
        field.label_from_instance = lambda row: (
            f"{row.name} · {row.code}, {row.get_technique_display()}, {row.get_phase_display()}"
        )

    def items(self) -> list[tuple[str, int]]:
        """(name on the list, reference): an earlier version's name is kept, a new item bears its reference's name."""
        chosen = self.cleaned_data["references"]
        return [(self.names.get(row.pk, row.name), row.pk) for row in chosen]
