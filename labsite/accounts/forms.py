"""Forms about accounts; the services judge what they mean."""

from __future__ import annotations

from django import forms

from .models import Role
from .services import PASSWORD_MAX_LENGTH


def _password_input(autocomplete: str) -> forms.PasswordInput:
    return forms.PasswordInput(attrs={"autocomplete": autocomplete})


class SignInForm(forms.Form):
    username = forms.CharField(
        label="User name",
        max_length=120,
        widget=forms.TextInput(attrs={"autocomplete": "username", "autocapitalize": "none", "spellcheck": "false"}),
    )
    password = forms.CharField(
        label="Password", strip=False, max_length=PASSWORD_MAX_LENGTH, widget=_password_input("current-password")
    )


class ChangePasswordForm(forms.Form):
    current_password = forms.CharField(
        label="Present password",
        strip=False,
        max_length=PASSWORD_MAX_LENGTH,
        widget=_password_input("current-password"),
    )
    new_password = forms.CharField(
        label="New password",
        strip=False,
        max_length=PASSWORD_MAX_LENGTH,
        widget=_password_input("new-password"),
        help_text="At least {length} characters; several words are easier to remember than signs and figures."
        " Spaces count.",
    )
    new_password_again = forms.CharField(
        label="New password once more",
        strip=False,
        max_length=PASSWORD_MAX_LENGTH,
        widget=_password_input("new-password"),
    )

    def __init__(self, *args: object, shortest: int, **kwargs: object):
        super().__init__(*args, **kwargs)
        help_text = self.fields["new_password"].help_text
        self.fields["new_password"].help_text = help_text.format(length=shortest)

    def clean(self) -> dict:
        cleaned = super().clean()
        again = cleaned.get("new_password_again")
        if again is not None and cleaned.get("new_password") != again:
            self.add_error("new_password_again", "The two new passwords differ.")
        return cleaned


class NewPersonForm(forms.Form):
    username = forms.CharField(
        label="User name",
        max_length=60,
        help_text="For signing in, without spaces. It can never be changed or given to somebody else.",
        widget=forms.TextInput(attrs={"autocomplete": "off", "autocapitalize": "none", "spellcheck": "false"}),
    )
    printed_name = forms.CharField(
        label="Printed name",
        max_length=120,
        help_text="As it shall stand beside this person's signatures.",
        widget=forms.TextInput(attrs={"autocomplete": "off"}),
    )
    roles = forms.MultipleChoiceField(
        label="Roles", choices=Role.choices, required=False, widget=forms.CheckboxSelectMultiple
    )


class ReasonForm(forms.Form):
    reason = forms.CharField(
        label="Reason", max_length=500, help_text="Kept in the audit trail.", widget=forms.TextInput()
    )


class RoleForm(ReasonForm):
    role = forms.ChoiceField(label="Role", choices=Role.choices)
    field_order = ("role", "reason")
