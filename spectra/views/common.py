"""What the pages of master data share: who may open them, how a form is tried, how its page looks."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from django import forms
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render

from labsite.accounts.models import Role
from labsite.accounts.permissions import page_for
from labsite.errors import BadInput, DomainError, NotPossible
from spectra import permissions

readers_only = page_for(*permissions.READERS)
owners_only = page_for(Role.METHOD_OWNER)
approvers_only = page_for(Role.METHOD_OWNER, Role.QA_MANAGER)
checkers_only = page_for(Role.ANALYST, Role.METHOD_OWNER)

UNPROCESSABLE = 422
Crumb = tuple[str, str]


def refused(form: forms.BaseForm, error: DomainError) -> None:
    """Show a refusal beside the field that it names, or above the form: reason, place, remedy."""
    field = error.params.get("question") or error.params.get("field")  # what a file leaves open has a field of its own
    place = f"Line {error.params['line']}: " if error.params.get("line") else ""
    text = f"{place}{error.message} {error.remedy}".strip()
    form.add_error(field if field in form.fields else None, text)


def attempt(form: forms.Form, act: Callable[[], object], *others: forms.BaseFormSet) -> tuple[object | None, int]:
    """Do `act` when the form (and the `others`) can be read; returns (what it made or None, the answer's status)."""
    if not form.is_bound:
        return None, 200
    if not all([form.is_valid(), *(other.is_valid() for other in others)]):
        return None, UNPROCESSABLE
    try:
        return act(), 200
    except (BadInput, NotPossible) as error:
        refused(form, error)
        return None, error.status


def form_page(
    request: HttpRequest,
    form: forms.Form,
    *,
    status: int,
    title: str,
    submit: str,
    crumbs: Sequence[Crumb],
    template: str = "spectra/form.html",
    intro: str = "",
    **more: object,
) -> HttpResponse:
    """A page that holds one form; its last crumb is where Cancel leads."""
    context = {
        "title": title,
        "form": form,
        "submit": submit,
        "crumbs": [{"label": label, "url": url} for label, url in crumbs],
        "cancel_url": crumbs[-1][1],
        "intro": intro,
        "has_file": form.is_multipart(),
        "wrong": status >= 400,  # a look at the structure is no refusal
        **more,
    }
    return render(request, template, context, status=status)


def bound(request: HttpRequest, form_class: type[forms.Form], **options: object) -> forms.Form:
    """The form with what was sent, or an empty one for the first look."""
    if request.method == "POST":
        return form_class(request.POST, request.FILES, **options)
    return form_class(**options)
