"""The pages of the trail: search, one entry, one record's life, verification, export."""

from __future__ import annotations

from urllib.parse import urlencode

from django.http import HttpRequest, HttpResponse, StreamingHttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from labsite.accounts.models import Role
from labsite.accounts.permissions import page_for
from labsite.errors import BadInput, NotVisible

from . import selectors, services
from .events import in_words
from .forms import ExportForm, SearchForm

readers_only = page_for(*selectors.READERS)
exporters_only = page_for(*selectors.EXPORTERS)
LARGEST_SEQ = 2**63 - 1


@require_safe
@readers_only
def search(request: HttpRequest) -> HttpResponse:
    form = SearchForm(request.GET)
    page, older_url, newest_url = None, "", ""
    if form.is_valid():
        before = request.GET.get("before", "")
        before_seq = min(int(before), LARGEST_SEQ) if before.isascii() and before.isdecimal() else None
        page = selectors.search(by=request.user, before_seq=before_seq, **form.filters())
        kept = {name: value for name, value in request.GET.items() if value and name in form.fields}
        if page.next_before_seq is not None:
            older_url = f"?{urlencode(kept | {'before': page.next_before_seq})}"
        if before_seq is not None:
            newest_url = f"?{urlencode(kept)}"
    context = {
        "form": form,
        "page": page,
        "older_url": older_url,
        "newest_url": newest_url,
        "searched": any(request.GET.get(name) for name in form.fields),
        "may_export": request.user.has_role(*selectors.EXPORTERS),
    }
    return render(request, "trail/search.html", context)


@require_safe
@readers_only
def entry(request: HttpRequest, seq: int) -> HttpResponse:
    if seq > LARGEST_SEQ:
        raise NotVisible("trail.no_such_entry", "There is no such entry in the trail.")
    row = selectors.entry(seq, by=request.user)
    may_see_address = request.user.has_role(Role.QA_MANAGER, Role.LAB_ADMINISTRATOR)
    return render(request, "trail/entry.html", {"row": row, "may_see_address": may_see_address})


@require_safe
@readers_only
def record(request: HttpRequest, kind: str, subject_id: str) -> HttpResponse:
    rows = selectors.timeline(kind, subject_id, by=request.user)
    own = [row for row in rows if (row.subject_kind, row.subject_id) == (kind, subject_id)]
    if not own:
        raise NotVisible("trail.no_such_record", "The trail has no entry about such a record.")
    context = {
        "rows": rows,
        "kind": kind,
        "kind_label": in_words(kind),
        "subject_id": subject_id,
        "label": own[-1].subject_label,
        "may_export": request.user.has_role(*selectors.EXPORTERS),
    }
    return render(request, "trail/record.html", context)


@require_http_methods(["GET", "POST"])
@exporters_only
def verify(request: HttpRequest) -> HttpResponse:
    if request.method == "POST":
        services.run_verification(by=request.user)
        return redirect("trail:verify")
    return render(request, "trail/verify.html", {"last": selectors.last_verification()})


@require_POST
@exporters_only
def export(request: HttpRequest) -> HttpResponse:
    form = ExportForm(request.POST)
    if not form.is_valid():
        raise BadInput(
            "trail.export_not_understood",
            "What to export could not be understood: " + "; ".join(form.errors),
            remedy="Go back to the search and export from there.",
        )
    as_json = form.cleaned_data["format"] == "json"
    pieces = services.export(by=request.user, as_json=as_json, filters=form.filters())
    kind, ending = ("application/json", "json") if as_json else ("text/csv; charset=utf-8", "csv")
    name = f"trail-{timezone.now():%Y%m%dT%H%M%SZ}.{ending}"
    headers = {"Content-Disposition": f'attachment; filename="{name}"'}
    return StreamingHttpResponse(pieces, content_type=kind, headers=headers)
