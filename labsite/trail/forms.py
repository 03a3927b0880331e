"""What one can ask the trail for."""

from __future__ import annotations

from datetime import UTC, datetime, time, timedelta

from django import forms

from labsite.accounts import selectors as accounts

from . import selectors
from .events import Event


def _events() -> list[tuple[str, object]]:
    groups: dict[str, list[tuple[str, str]]] = {}
    for event in Event:
        groups.setdefault(event.group, []).append((event.value, event.label))
    return [("", "any"), *groups.items()]


class SearchForm(forms.Form):
    text = forms.CharField(
        label="Text",
        required=False,
        max_length=200,
        help_text="In records, reasons, values and names.",
        widget=forms.TextInput(attrs={"type": "search"}),
    )
    event = forms.ChoiceField(label="What happened", required=False, choices=_events)
    actor = forms.TypedChoiceField(label="Who", required=False, coerce=int, empty_value=None)
    subject_kind = forms.ChoiceField(label="Kind of record", required=False)
    since = forms.DateField(label="From", required=False, widget=forms.DateInput(attrs={"type": "date"}))
    until = forms.DateField(
        label="To", required=False, widget=forms.DateInput(attrs={"type": "date"}), help_text="Days in UTC."
    )

    def __init__(self, *args: object, **kwargs: object):
        super().__init__(*args, **kwargs)
        people = [(person.pk, f"{person.printed_name} ({person.username})") for person in accounts.people()]
        self.fields["actor"].choices = [("", "anybody"), *people]
        self.fields["subject_kind"].choices = [("", "any"), *selectors.subject_kinds()]

    def clean(self) -> dict:
        cleaned = super().clean()
        since, until = cleaned.get("since"), cleaned.get("until")
        if since and until and until < since:
            self.add_error("until", "This day is before the first one.")
        return cleaned

    def filters(self) -> dict[str, object]:
        """The arguments for `selectors.search`; whole days, the last one included."""
        asked, days = self.cleaned_data, timedelta(days=1)
        return {
            "text": asked["text"],
            "event": asked["event"],
            "actor_id": asked["actor"],
            "subject_kind": asked["subject_kind"],
            "since": datetime.combine(asked["since"], time.min, UTC) if asked["since"] else None,
            "until": datetime.combine(asked["until"], time.min, UTC) + days if asked["until"] else None,
        }


class ExportForm(SearchForm):
    subject_id = forms.CharField(required=False, max_length=200)
    format = forms.ChoiceField(choices=[("csv", "CSV"), ("json", "JSON")])

    def filters(self) -> dict[str, object]:
        return super().filters() | {"subject_id": self.cleaned_data["subject_id"]}
