"""The shelf of references: list, one reference, registering one; and the stored files as they came."""

from __future__ import annotations

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.utils.http import content_disposition_header
from django.views.decorators.http import require_GET, require_http_methods

from spectra import permissions, selectors, selectors_master
from spectra.forms import ReferenceForm
from spectra.services import master

from .common import attempt, bound, form_page, owners_only, readers_only

LONGEST_SEARCH = 100


@require_GET
@readers_only
def shelf(request: HttpRequest) -> HttpResponse:
    text = request.GET.get("text", "").strip()[:LONGEST_SEARCH]
    context = {
        "references": selectors_master.find_references(text),
        "text": text,
        "may_draft": permissions.may_own_methods(request.user),
    }
    return render(request, "spectra/shelf.html", context)


@require_GET
@readers_only
def reference(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.reference(pk)
    context = {
        "row": row,
        "measured": selectors_master.reference_block(row),
        "is_valid": selectors.reference_is_valid(row),
        "why_not": selectors_master.why_not_approve(row, request.user),
    }
    return render(request, "spectra/reference.html", context)


@require_http_methods(["GET", "POST"])
@owners_only
def new_reference(request: HttpRequest) -> HttpResponse:
    form = bound(request, ReferenceForm, initial={"material": request.GET.get("material", "")})

    def register() -> object:
        data = form.cleaned_data
        return master.register_reference(
            by=request.user,
            code=data["code"],
            name=data["name"],
            material_id=data["material"].pk if data["material"] else None,
            file_name=data["file"].name,
            data=data["file"].read(),
            values=form.values(),
        )

    row, status = attempt(form, register)
    if row is not None:
        messages.success(request, f"{row.code} was registered. It counts once somebody else has approved it.")
        return redirect("spectra:reference", row.pk)
    return form_page(
        request,
        form,
        status=status,
        title="Register a reference",
        submit="Register as a draft",
        crumbs=[("Shelf", reverse("spectra:shelf"))],
        template="spectra/reference_form.html",
    )


@require_GET
@readers_only
def raw_file(request: HttpRequest, sha256: str) -> HttpResponse:
    """The bytes as they came, for saving only: nothing of them is shown or run by the browser."""
    name, data = selectors_master.raw_file(sha256)
    response = HttpResponse(data, content_type="application/octet-stream")
    response["Content-Disposition"] = content_disposition_header(True, name)
    response["X-Content-Type-Options"] = "nosniff"
    return response
