"""The part of a form that asks for a signature."""

from __future__ import annotations

from django import forms

from labsite.accounts.services import PASSWORD_MAX_LENGTH


class SignatureForm(forms.Form):
    """A password, and the hash of the content that was shown; `confirm_label` adds a box that has to be ticked."""

    content_hash = forms.RegexField(regex=r"\A[0-9a-f]{64}\Z", widget=forms.HiddenInput)
    password = forms.CharField(
        label="Your password",
        strip=False,
        max_length=PASSWORD_MAX_LENGTH,
        help_text="Asked for at every signature.",
        widget=forms.PasswordInput(attrs={"autocomplete": "current-password"}),
    )

    def __init__(self, *args: object, confirm_label: str = "", **kwargs: object):
        super().__init__(*args, **kwargs)
        if confirm_label:
            self.fields["confirm"] = forms.BooleanField(label=confirm_label)
