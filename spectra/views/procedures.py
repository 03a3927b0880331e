"""Procedures with their editions, method versions, and the group table."""

from __future__ import annotations

import json

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_GET, require_http_methods, require_POST

from spectra import permissions, selectors, selectors_master
from spectra.core.params import MethodParams
from spectra.forms import GroupTableForm, MethodForm, ProcedureForm
from spectra.models import ApprovalState
from spectra.services import master

from .common import attempt, bound, form_page, owners_only, readers_only

DRAFTED = "The draft was saved. It counts once somebody else has approved it."
BASIS_CRUMBS = [("Procedures", "spectra:procedures")]


def _crumbs(*more: tuple[str, str]) -> list[tuple[str, str]]:
    return [(label, reverse(name)) for label, name in [*BASIS_CRUMBS, *more]]


@require_GET
@readers_only
def procedures(request: HttpRequest) -> HttpResponse:
    rows = list(selectors.procedures())
    in_force = selectors_master.editions_in_force(rows)
    for row in rows:
        row.in_force = row.pk in in_force
    methods = list(selectors_master.methods())
    tables = list(selectors_master.group_tables())
    context = {
        "rows": rows,
        "may_draft": permissions.may_own_methods(request.user),
        "method": next((row for row in methods if row.state == ApprovalState.APPROVED), None),
        "methods": methods,
        "table": next((row for row in tables if row.state == ApprovalState.APPROVED), None),
        "tables": tables,
    }
    return render(request, "spectra/procedures.html", context)


@require_GET
@readers_only
def procedure(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.procedure(pk)
    context = {
        "row": row,
        "editions": selectors_master.editions_of(row),
        "in_force": selectors_master.effective_edition(row.number),
        "materials": selectors_master.materials_named(row.number),
        "why_not": selectors_master.why_not_approve(row, request.user),
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/procedure.html", context)


@require_http_methods(["GET", "POST"])
@owners_only
def new_procedure(request: HttpRequest) -> HttpResponse:
    return _draft_procedure(request, bound(request, ProcedureForm), None)


@require_http_methods(["GET", "POST"])
@owners_only
def new_edition(request: HttpRequest, pk: int) -> HttpResponse:
    earlier = selectors.procedure(pk)
    return _draft_procedure(request, bound(request, ProcedureForm, edition=earlier), earlier)


def _draft_procedure(request, form, earlier) -> HttpResponse:
    row, status = attempt(
        form,
        lambda: master.draft_procedure(
            by=request.user, number=earlier.number if earlier else form.cleaned_data["number"], values=form.values()
        ),
    )
    if row is not None:
        messages.success(request, DRAFTED)
        return redirect("spectra:procedure", row.pk)
    return form_page(
        request,
        form,
        status=status,
        submit="Save the draft",
        crumbs=_crumbs(),
        title=f"New edition of {earlier.number}" if earlier else "New procedure",
        intro=f"Begins with everything of edition {earlier.edition}." if earlier else "",
        template="spectra/procedure_form.html",
        no_methods=not selectors_master.approved_methods().exists(),
    )


@require_GET
@readers_only
def methods(request: HttpRequest) -> HttpResponse:
    context = {
        "rows": selectors_master.methods(),
        "shipped": selectors_master.shipped_method_row(),
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/methods.html", context)


@require_GET
@readers_only
def method(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors_master.method(pk)
    context = {
        "row": row,
        "parameters": selectors_master.parameters_of(row),
        "why_not": selectors_master.why_not_approve(row, request.user),
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/method.html", context)


@require_POST
@owners_only
def load_method(request: HttpRequest) -> HttpResponse:
    row = master.draft_method(by=request.user, name=selectors_master.SHIPPED_METHOD_NAME, refuse_same=True)
    messages.success(request, DRAFTED)
    return redirect("spectra:method", row.pk)


@require_http_methods(["GET", "POST"])
@owners_only
def new_method(request: HttpRequest, pk: int | None = None) -> HttpResponse:
    earlier = selectors_master.method(pk) if pk is not None else None
    start = earlier.parameters if earlier else MethodParams().to_dict()
    form = bound(request, MethodForm, initial={"text": json.dumps(start, indent=2)})
    row, status = attempt(
        form,
        lambda: master.draft_method(
            by=request.user,
            name=form.cleaned_data["name"],
            parameters=form.cleaned_data["parameters"],
            refuse_same=True,
        ),
    )
    if row is not None:
        messages.success(request, DRAFTED)
        return redirect("spectra:method", row.pk)
    begins = f"method version {earlier.number}" if earlier else "the shipped parameters"
    return form_page(
        request,
        form,
        status=status,
        title="New method version",
        submit="Save the draft",
        crumbs=_crumbs(("Methods", "spectra:methods")),
        intro=f"Begins with {begins}. Change what has to differ.",
    )


@require_GET
@readers_only
def group_tables(request: HttpRequest) -> HttpResponse:
    context = {
        "rows": selectors_master.group_tables(),
        "shipped": selectors_master.shipped_group_table_row(),
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/group_tables.html", context)


@require_GET
@readers_only
def group_table(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors_master.group_table_version(pk)
    context = {
        "row": row,
        "table": selectors_master.parsed(row),
        "why_not": selectors_master.why_not_approve(row, request.user),
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/group_table.html", context)


@require_POST
@owners_only
def load_group_table(request: HttpRequest) -> HttpResponse:
    row = master.load_group_table(by=request.user, text=selectors_master.shipped_group_table(), refuse_same=True)
    messages.success(request, DRAFTED)
    return redirect("spectra:group_table", row.pk)


@require_http_methods(["GET", "POST"])
@owners_only
def new_group_table(request: HttpRequest, pk: int | None = None) -> HttpResponse:
    earlier = selectors_master.group_table_version(pk) if pk is not None else None
    form = bound(request, GroupTableForm, initial={"text": earlier.text if earlier else ""})
    row, status = attempt(
        form, lambda: master.load_group_table(by=request.user, text=form.cleaned_data["text"], refuse_same=True)
    )
    if row is not None:
        messages.success(request, DRAFTED)
        return redirect("spectra:group_table", row.pk)
    return form_page(
        request,
        form,
        status=status,
        title="New version of the group table",
        submit="Save the draft",
        crumbs=_crumbs(("Group table", "spectra:group_tables")),
        intro=f"Begins with the text of version {earlier.number}." if earlier else "",
    )
