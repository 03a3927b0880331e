"""Materials and their versions, and the watch lists that they name."""

from __future__ import annotations

from collections.abc import Callable

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_GET, require_http_methods, require_POST

from labsite.errors import NotPossible
from spectra import permissions, selectors, selectors_master
from spectra.forms import MaterialForm, RetireForm, WatchListForm
from spectra.models import ApprovalState, MaterialVersion
from spectra.services import master

from .common import approvers_only, attempt, bound, form_page, owners_only, readers_only


@require_GET
@readers_only
def materials(request: HttpRequest) -> HttpResponse:
    rows = []
    for material in selectors.materials():
        versions = list(material.versions.all())
        shown = next(
            (row for row in versions if row.state == ApprovalState.APPROVED), versions[0] if versions else None
        )
        draft = next((row for row in versions if row.state == ApprovalState.DRAFT and row is not shown), None)
        rows.append({"material": material, "shown": shown, "draft": draft})
    context = {"rows": rows, "may_draft": permissions.may_own_methods(request.user)}
    return render(request, "spectra/materials.html", context)


@require_GET
@readers_only
def material(request: HttpRequest, pk: int) -> HttpResponse:
    return material_page(request, selectors.material_version(pk), RetireForm())


def material_page(
    request: HttpRequest, version: MaterialVersion, retire: RetireForm, status: int = 200
) -> HttpResponse:
    context = {
        **material_facts(version),
        "row": version,
        "versions": selectors_master.versions_of(version.material),
        "draft": selectors_master.draft_of(version.material),
        "references": selectors.references().filter(material=version.material),
        "why_not": selectors_master.why_not_approve(version, request.user),
        "may_draft": permissions.may_own_methods(request.user),
        "may_retire": permissions.may_approve_master_data(request.user) and version.state == ApprovalState.APPROVED,
        "retire_form": retire,
    }
    return render(request, "spectra/material.html", context, status=status)


def material_facts(version: MaterialVersion) -> dict[str, object]:
    """What the facts of a version need beside the row; the approval page shows the same."""
    return {
        "structure": selectors_master.material_structure(version),
        "group_words": dict(selectors_master.groups_to_choose()),
        "edition": selectors_master.effective_edition(version.procedure_number),
    }


@require_http_methods(["GET", "POST"])
@owners_only
def new_material(request: HttpRequest) -> HttpResponse:
    form = bound(request, MaterialForm)
    version, status = _attempt(
        request,
        form,
        lambda: master.draft_material(by=request.user, code=form.cleaned_data["code"], values=form.values()),
    )
    if version is not None:
        return _drafted(request, version)
    return _material_form(request, form, status, "New material", [("Materials", reverse("spectra:materials"))])


@require_http_methods(["GET", "POST"])
@owners_only
def new_material_version(request: HttpRequest, pk: int) -> HttpResponse:
    earlier = selectors.material_version(pk)
    form = bound(request, MaterialForm, version=earlier)
    version, status = _attempt(
        request,
        form,
        lambda: master.draft_material(by=request.user, code=earlier.material.code, values=form.values()),
    )
    if version is not None:
        return _drafted(request, version)
    return _material_form(
        request,
        form,
        status,
        f"New version of {earlier.material.code}",
        _to_version(earlier),
        intro=f"Begins with everything of version {earlier.number}.",
    )


@require_http_methods(["GET", "POST"])
@owners_only
def change_material(request: HttpRequest, pk: int) -> HttpResponse:
    draft = selectors.material_version(pk)
    if draft.state != ApprovalState.DRAFT:
        raise NotPossible(
            "material.not_a_draft",
            "An approved version is never changed.",
            remedy="Draft a new version of the material.",
        )
    form = bound(request, MaterialForm, version=draft, changing=True)
    version, status = _attempt(
        request,
        form,
        lambda: master.change_material(
            pk=pk, by=request.user, values=form.values(), reason=form.cleaned_data["reason"].strip()
        ),
    )
    if version is not None:
        messages.success(request, "The draft was changed.")
        return redirect("spectra:material", version.pk)
    return _material_form(
        request, form, status, f"Change the draft of {draft.material.code}, version {draft.number}", _to_version(draft)
    )


@require_POST
@approvers_only
def retire_material(request: HttpRequest, pk: int) -> HttpResponse:
    version = selectors.material_version(pk)
    form = RetireForm(request.POST)
    retired, status = attempt(
        form, lambda: master.retire_material(pk=pk, by=request.user, reason=form.cleaned_data["reason"])
    )
    if retired is not None:
        messages.success(request, f"{version.material.code}, version {version.number} is retired.")
        return redirect("spectra:material", pk)
    return material_page(request, version, form, status)


@require_GET
@owners_only
def structure(request: HttpRequest) -> HttpResponse:
    """How a structure is read: its drawing, formula and groups, as a part of the form's page."""
    text = (request.GET.get("smiles") or request.GET.get("repeat_unit") or "").strip()
    return render(
        request,
        "spectra/_structure.html",
        {"structure": selectors_master.structure_facts(text), "asked": True, "may_take": True},
    )


def _attempt(request: HttpRequest, form: MaterialForm, act: Callable[[], object]) -> tuple[object | None, int]:
    """As `attempt`; but the buttons that check the structure and take its groups save nothing."""
    return (None, 200) if {"check", "take_groups"} & set(request.POST) else attempt(form, act)


def _drafted(request: HttpRequest, version: MaterialVersion) -> HttpResponse:
    messages.success(request, "The draft was saved. It counts once somebody else has approved it.")
    return redirect("spectra:material", version.pk)


def _to_version(version: MaterialVersion) -> list[tuple[str, str]]:
    return [
        ("Materials", reverse("spectra:materials")),
        (f"{version.material.code}, version {version.number}", reverse("spectra:material", args=[version.pk])),
    ]


def _material_form(request, form, status, title, crumbs, intro="") -> HttpResponse:
    text = (form["smiles"].value() or form["repeat_unit"].value() or "").strip()
    structure = selectors_master.structure_facts(text)
    taking = "take_groups" in request.POST
    taken = form.take_groups(structure.group_ids) if taking else []
    if taking or "check" in request.POST:
        form.leave_unjudged()
    return form_page(
        request,
        form,
        status=status,
        title=title,
        submit="Save the draft",
        crumbs=crumbs,
        intro=intro,
        template="spectra/material_form.html",
        structure=structure,
        asked=taking or "check" in request.POST,
        may_take=True,
        taking=taking,
        taken=taken,
        no_groups=not selectors_master.groups_to_choose(),
        no_procedures=not selectors_master.procedures_to_choose(),
    )


@require_GET
@readers_only
def watch_lists(request: HttpRequest) -> HttpResponse:
    context = {
        "rows": selectors_master.watch_lists(),
        "may_draft": permissions.may_own_methods(request.user),
        "any_reference": selectors_master.references_to_choose().exists(),
    }
    return render(request, "spectra/watch_lists.html", context)


@require_GET
@readers_only
def watch_list(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors_master.watch_list(pk)
    context = {
        "row": row,
        "why_not": selectors_master.why_not_approve(row, request.user),
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/watch_list.html", context)


@require_http_methods(["GET", "POST"])
@owners_only
def new_watch_list(request: HttpRequest) -> HttpResponse:
    return _draft_watch_list(request, bound(request, WatchListForm), None)


@require_http_methods(["GET", "POST"])
@owners_only
def new_watch_list_version(request: HttpRequest, pk: int) -> HttpResponse:
    earlier = selectors_master.watch_list(pk)
    return _draft_watch_list(request, bound(request, WatchListForm, watch_list=earlier), earlier)


def _draft_watch_list(request, form, earlier) -> HttpResponse:
    row, status = attempt(
        form,
        lambda: master.draft_watch_list(
            by=request.user,
            code=earlier.code if earlier else form.cleaned_data["code"],
            title=form.cleaned_data["title"],
            items=form.items(),
        ),
    )
    if row is not None:
        messages.success(request, "The draft was saved. It counts once somebody else has approved it.")
        return redirect("spectra:watch_list", row.pk)
    crumbs = [("Materials", reverse("spectra:materials")), ("Watch lists", reverse("spectra:watch_lists"))]
    return form_page(
        request,
        form,
        status=status,
        submit="Save the draft",
        crumbs=crumbs,
        title=f"New version of watch list {earlier.code}" if earlier else "New watch list",
        template="spectra/watch_list_form.html",
        any_reference=selectors_master.references_to_choose().exists(),
    )
