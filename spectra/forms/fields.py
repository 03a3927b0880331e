"""Fields that several forms need, and forms whose page shows them in titled parts."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

from django import forms

LONGEST_LINE = 300
MOST_LINES = 40
LONGEST_TEXT = 4000
CHOOSE = [("", "choose")]
CODE_HINT = "Short and lasting; letters, digits, dots and hyphens."


class Day(forms.DateField):
    """A date, picked with the browser's own calendar."""

    def __init__(self, **kwargs):
        super().__init__(widget=forms.DateInput(attrs={"type": "date"}, format="%Y-%m-%d"), **kwargs)


class Moment(forms.DateTimeField):
    """A moment in UTC, to the minute."""

    def __init__(self, **kwargs):
        widget = forms.DateTimeInput(attrs={"type": "datetime-local"}, format="%Y-%m-%dT%H:%M")
        super().__init__(widget=widget, **kwargs)


class SelectSome(forms.Select):
    """A choice of which some options are shown but cannot be chosen."""

    def __init__(self, *, kept_back: Iterable[str], **kwargs):
        super().__init__(**kwargs)
        self.kept_back = frozenset(kept_back)

    def create_option(self, name, value, *args, **kwargs):
        option = super().create_option(name, value, *args, **kwargs)
        if str(value) in self.kept_back:
            option["attrs"]["disabled"] = True
        return option


class Code(forms.RegexField):
    """A short name under which a record is known."""

    def __init__(self, **kwargs):
        super().__init__(
            regex=r"\A[A-Za-z0-9][A-Za-z0-9.\-]*\Z",
            max_length=40,
            error_messages={"invalid": "Use letters, digits, dots and hyphens only, without spaces."},
            widget=forms.TextInput(attrs={"autocomplete": "off", "spellcheck": "false"}),
            **kwargs,
        )


class Lines(forms.CharField):
    """A list, one item a line."""

    def __init__(self, **kwargs):
        super().__init__(widget=forms.Textarea(attrs={"rows": 3}), max_length=LONGEST_TEXT, required=False, **kwargs)

    def prepare_value(self, value):
        return "\n".join(value) if isinstance(value, list | tuple) else value

    def clean(self, value):
        lines = [line.strip() for line in super().clean(value).splitlines() if line.strip()]
        if len(lines) > MOST_LINES:
            raise forms.ValidationError(f"{len(lines)} lines are more than the {MOST_LINES} that fit.")
        if any(len(line) > LONGEST_LINE for line in lines):
            raise forms.ValidationError(f"A line is longer than {LONGEST_LINE} characters: split it.")
        return lines


class Sectioned(forms.Form):
    """A form whose page shows its fields in titled parts: `sections` is ((title, hint, (field names)), ...)."""

    sections: Sequence[tuple[str, str, Sequence[str]]] = ()

    def parts(self) -> Iterator[dict[str, object]]:
        for title, hint, names in self.sections:
            fields = [self[name] for name in names if name in self.fields]
            if fields:
                yield {"title": title, "hint": hint, "fields": fields}


def text_area(rows: int = 3) -> forms.Textarea:
    return forms.Textarea(attrs={"rows": rows})
