"""The page on which a second person reads a draft of master data and signs it."""

from __future__ import annotations

from django.contrib import messages
from django.db import models
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.debug import sensitive_post_parameters
from django.views.decorators.http import require_http_methods

from labsite.errors import BadInput, NotAllowed, NotPossible
from labsite.signing.forms import SignatureForm
from labsite.signing.models import Meaning
from labsite.signing.services import prove
from spectra import selectors, selectors_master
from spectra.models import ApprovalState
from spectra.services import approvals
from spectra.templatetags.master import record_url

from .common import approvers_only, refused
from .materials import material_facts

KIND_WORDS = {
    "material": "material",
    "procedure": "procedure",
    "method": "method version",
    "group_table": "group table",
    "watch_list": "watch list",
    "reference": "reference",
}


@sensitive_post_parameters("password")
@require_http_methods(["GET", "POST"])
@approvers_only
def approve(request: HttpRequest, kind: str, pk: int) -> HttpResponse:
    approvals.approvable(kind, pk)
    row = _with_everything(kind, pk)
    why_not = selectors_master.why_not_approve(row, request.user)
    shown_hash = approvals.content_hash_of(row)
    if request.method == "GET":
        return _page(request, row, SignatureForm(initial={"content_hash": shown_hash}), shown_hash, why_not)
    form = SignatureForm(request.POST)
    if why_not:
        status = NotPossible.status if row.state != ApprovalState.DRAFT else NotAllowed.status
        return _page(request, row, form, shown_hash, why_not, status)
    if not form.is_valid():
        return _page(request, row, form, shown_hash, "", BadInput.status)
    try:
        proof = prove(request, password=form.cleaned_data["password"])
        approvals.approve(
            kind=kind, pk=pk, by=request.user, proof=proof, content_hash=form.cleaned_data["content_hash"]
        )
    except (BadInput, NotAllowed, NotPossible) as error:
        row = _with_everything(kind, pk)
        shown_hash = approvals.content_hash_of(row)
        sent = request.POST.copy()
        sent["content_hash"] = shown_hash  # the page shows what is there now
        form = SignatureForm(sent)
        form.is_valid()
        refused(form, error)
        why_not = selectors_master.why_not_approve(row, request.user)
        return _page(request, row, form, shown_hash, why_not, error.status)
    messages.success(request, f"{row} is approved.")
    return redirect(record_url(row))


def _with_everything(kind: str, pk: int) -> models.Model:
    """The record with what its page shows."""
    return {
        "material": selectors.material_version,
        "procedure": selectors.procedure,
        "method": selectors_master.method,
        "group_table": selectors_master.group_table_version,
        "watch_list": selectors_master.watch_list,
        "reference": selectors.reference,
    }[kind](pk)


def _page(
    request: HttpRequest, row: models.Model, form: SignatureForm, shown_hash: str, why_not: str, status: int = 200
) -> HttpResponse:
    kind = selectors_master.kind_of(row)
    before = selectors_master.version_before(row)
    context = {
        "row": row,
        "kind": kind,
        "kind_words": KIND_WORDS[kind],
        "facts_template": f"spectra/_{kind}.html",
        "form": form,
        "content_hash": shown_hash,
        "meaning": Meaning.APPROVED.label,
        "why_not": why_not,
        "before": before,
        "changes": selectors_master.changes_between(before, row) if before is not None else [],
    }
    if kind == "material":
        context |= material_facts(row)
    elif kind == "method":
        context["parameters"] = selectors_master.parameters_of(row)
    elif kind == "group_table":
        context["table"] = selectors_master.parsed(row)
    elif kind == "reference":
        context["measured"] = selectors_master.reference_block(row)
    return render(request, "spectra/approve.html", context, status=status)
