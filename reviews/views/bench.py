"""The bench: one spectrum, its evidence, the claims made from it, the conclusion and the analyst's signature."""

from __future__ import annotations

from collections.abc import Mapping

from django.contrib import messages
from django.http import HttpRequest, HttpResponse, JsonResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_GET, require_http_methods, require_POST

from labsite.accounts.permissions import page_for
from labsite.errors import BadInput, NotPossible
from labsite.policy import plot_page
from labsite.signing import services as signing
from labsite.signing.forms import SignatureForm
from reviews import permissions, presenting, selectors
from reviews.models import Claim, ClaimKind, InterpretationVersion
from reviews.services import drafts
from reviews.transitions import Action, State
from reviews.views.receiving import add_error
from reviews.words import VERDICTS
from spectra import arrays, plots, store
from spectra import permissions as spectra_permissions
from spectra import selectors as spectra_selectors
from spectra.models import AnalysisState


@page_for(*spectra_permissions.READERS)
@plot_page
@require_GET
def bench(request: HttpRequest, pk: int) -> HttpResponse:
    return _bench_page(request, pk)


@page_for(*spectra_permissions.READERS)
@require_GET
def version(request: HttpRequest, pk: int) -> HttpResponse:
    """One address for a version: the bench while it is a draft, the review page from then on."""
    row = selectors.version(pk)
    if row.state == State.DRAFT:
        return redirect("reviews:bench", pk=row.analysis.spectrum_id)
    return redirect("reviews:review", pk=row.pk)


def _bench_page(
    request: HttpRequest,
    spectrum_pk: int,
    *,
    claim_errors: Mapping[int, dict] | None = None,
    add_claim: dict | None = None,
    conclusion: dict | None = None,
    status: int = 200,
) -> HttpResponse:
    spectrum = spectra_selectors.spectrum(spectrum_pk)
    examination = selectors.examination(spectrum.examination_id)
    latest = selectors.latest_version(examination)
    current = selectors.version(latest.pk) if latest else None
    own = current is not None and current.analysis.spectrum_id == spectrum.pk
    analysis = current.analysis if own else spectra_selectors.latest_analysis(spectrum)
    context: dict[str, object] = {
        "crumbs": presenting.crumbs(examination),
        "headline": presenting.title_of(examination),
        "chip": current.state if own else "",
        "facts": presenting.headline_facts(examination) + presenting.measurement_facts(spectrum),
        "life": presenting.life_line(examination, current),
        "spectra": [
            {
                "label": other.upload.file_name,
                "url": reverse("reviews:bench", args=[other.pk]),
                "current": other.pk == spectrum.pk,
                "role": other.get_role_display(),
            }
            for other in spectra_selectors.spectra_of(examination)
        ],
    }
    if analysis is None or analysis.state != AnalysisState.DONE:
        context["pending"] = _pending(analysis, spectrum.pk, 0)
        return render(request, "reviews/bench.html", context, status=status)
    result = spectra_selectors.result_of(analysis)
    context |= {
        "findings": presenting.measurement_cautions(spectrum, result),
        "reading_findings": spectrum.reading_findings,
        "plot": presenting.plot(spectrum, analysis, result),
        "masked": result.get("masked", []),
        "bands": presenting.band_rows(result),
        "relative": presenting.is_relative(result),
        "impurities": result.get("impurities"),
        "identity": result.get("identity"),
        "structure": result.get("structure"),
        "analysis": analysis,
        "cautions": examination.delivery.material_version.cautions,
        "companions": examination.delivery.material_version.companion_tests,
        "not_separable": examination.delivery.material_version.not_separable_from,
        "own": own,
    }
    context |= presenting.lanes(result, presenting.claimed_groups(current) if own else ())
    if own:
        claims = presenting.claim_items(current, result)
        for item in claims:
            item |= (claim_errors or {}).get(item["id"], {})
        context |= presenting.bench_state(current, request.user)
        context |= {
            "claims": claims,
            "add_claim": add_claim or _empty_claim(current),
            "conclusion": conclusion or presenting.bench_conclusion(current),
            "decisions": presenting.decision_notes(current),
        }
    return render(request, "reviews/bench.html", context, status=status)


def _pending(analysis, spectrum_pk: int, asked: int) -> dict[str, object]:
    return {
        "id": "analysis",
        "label": "Analysis",
        "url": reverse("reviews:analysis_progress", args=[spectrum_pk]) + f"?asked={asked + 1}",
        "delay_s": min(1 + asked // 5, 10),
        "percent": analysis.progress_percent if analysis else None,
        "state": analysis.state if analysis else "failed",
        "detail": (analysis.problem_text or analysis.step)
        if analysis
        else "this spectrum is not the decisive one, so it was not analysed",
    }


@page_for(*spectra_permissions.READERS)
@require_GET
def analysis_progress(request: HttpRequest, pk: int) -> HttpResponse:
    asked = request.GET.get("asked", "0")
    spectrum = spectra_selectors.spectrum(pk)
    analysis = spectra_selectors.latest_analysis(spectrum)
    pending = _pending(analysis, pk, int(asked) if asked.isdecimal() and len(asked) < 6 else 0)
    response = render(request, "parts/progress.html", pending)
    if pending["state"] == AnalysisState.DONE:
        response["HX-Refresh"] = "true"
    return response


@page_for(*spectra_permissions.READERS)
@require_GET
def plot(request: HttpRequest, pk: int) -> HttpResponse:
    """The figures of one analysis, with the overlays that were asked for."""
    analysis = spectra_selectors.analysis(pk)
    if analysis.state != AnalysisState.DONE:
        raise NotPossible("analysis.not_done", "This analysis has no result to draw.")
    try:
        figures = plots.bench_plot(
            curves=arrays.unpack_curves(store.get(analysis.curves_sha256)),
            result=spectra_selectors.result_of(analysis),
            show=request.GET.get("show", "absorbance"),
            overlays=request.GET.getlist("overlay"),
        )
    except ValueError as error:
        raise BadInput("plot.unknown", str(error)) from None
    return JsonResponse(figures)


def _empty_claim(row: InterpretationVersion) -> dict[str, object]:
    kinds = [(kind, label) for kind, label in ClaimKind.choices if kind != ClaimKind.IDENTITY]
    verdicts = [
        (f"{kind}:{verdict}", f"{label}: {word}") for kind, label in kinds for verdict, word in VERDICTS[kind].items()
    ]
    return {
        "url": reverse("reviews:add_claim", args=[row.pk]),
        "kinds": kinds,
        "verdicts": verdicts,
        "typed": {},
        "errors": {},
        "open": False,
    }


def _edits(request: HttpRequest) -> int | None:
    """The state of the draft that the page showed, where it sent one."""
    text = request.POST.get("edits", "")
    return int(text) if text.isdecimal() and len(text) < 10 else None


def _claim_answer(request: HttpRequest, row: InterpretationVersion, claim: Claim, *, errors: dict | None = None):
    """The claim's part alone, with what else changed on the page, when htmx asks; else the bench at that claim."""
    if request.headers.get("HX-Request") != "true":
        if errors:
            return _bench_page(request, row.analysis.spectrum_id, claim_errors={claim.pk: errors}, status=422)
        return redirect(reverse("reviews:bench", args=[row.analysis.spectrum_id]) + f"#claim-{claim.pk}")
    fresh = selectors.version(row.pk)
    result = spectra_selectors.result_of(fresh.analysis)
    shown = next(c for c in fresh.claims.all() if c.pk == claim.pk)
    item = presenting.claim_item(shown, lanes_by_group=presenting.positions_by_group(result)) | (errors or {})
    context = presenting.bench_state(fresh, request.user) | {"claim": item, "out_of_band": True}
    return render(request, "reviews/_claim_answer.html", context)


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def confirm_claim(request: HttpRequest, pk: int, claim_pk: int) -> HttpResponse:
    claim = drafts.confirm_claim(version_id=pk, claim_id=claim_pk, by=request.user)
    return _claim_answer(request, selectors.version(pk), claim)


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def change_claim(request: HttpRequest, pk: int, claim_pk: int) -> HttpResponse:
    typed = {"verdict": request.POST.get("verdict", ""), "reason": request.POST.get("reason", "")}
    try:
        claim = drafts.change_claim(version_id=pk, claim_id=claim_pk, by=request.user, edits=_edits(request), **typed)
    except BadInput as error:
        row = selectors.version(pk)
        claim = next((claim for claim in row.claims.all() if claim.pk == claim_pk), None)
        if claim is None:
            raise
        return _claim_answer(
            request, row, claim, errors={"errors": {error.params.get("field"): error.message}, "typed": typed}
        )
    return _claim_answer(request, selectors.version(pk), claim)


@page_for(*spectra_permissions.READERS)
@require_POST
def confirm_uneventful(request: HttpRequest, pk: int) -> HttpResponse:
    count = drafts.confirm_uneventful(version_id=pk, by=request.user)
    messages.success(request, f"{count} claim{'s' if count > 1 else ''} confirmed as expected.")
    return redirect("reviews:bench", pk=selectors.version(pk).analysis.spectrum_id)


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def add_claim(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.version(pk)
    kind, _, verdict = request.POST.get("verdict", "").partition(":")
    typed = {
        "kind": request.POST.get("kind", kind),
        "verdict": request.POST.get("verdict", ""),
        "title": request.POST.get("title", ""),
        "reason": request.POST.get("reason", ""),
    }
    try:
        drafts.add_claim(
            version_id=pk, by=request.user, kind=kind, title=typed["title"], verdict=verdict, reason=typed["reason"]
        )
    except BadInput as error:
        again = _empty_claim(row) | {
            "typed": typed,
            "errors": {error.params.get("field", "title"): error.message},
            "open": True,
        }
        return _bench_page(request, row.analysis.spectrum_id, add_claim=again, status=422)
    messages.success(request, "The claim was added.")
    return redirect("reviews:bench", pk=row.analysis.spectrum_id)


@page_for(*spectra_permissions.READERS)
@require_POST
def remove_claim(request: HttpRequest, pk: int, claim_pk: int) -> HttpResponse:
    drafts.remove_claim(version_id=pk, claim_id=claim_pk, by=request.user, reason=request.POST.get("reason", ""))
    return redirect("reviews:bench", pk=selectors.version(pk).analysis.spectrum_id)


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def write_conclusion(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.version(pk)
    value, text = request.POST.get("value", ""), request.POST.get("text", "")
    try:
        drafts.write_conclusion(version_id=pk, by=request.user, conclusion=value, text=text, edits=_edits(request))
    except BadInput as error:
        field = {"conclusion": "value", "conclusion_text": "text"}.get(error.params.get("field"), "value")
        typed = presenting.bench_conclusion(row) | {
            "value": value,
            "text": text,
            "errors": {field: f"{error.message} {error.remedy}".strip()},
        }
        return _bench_page(request, row.analysis.spectrum_id, conclusion=typed, status=422)
    messages.success(request, "The conclusion was saved.")
    return redirect(reverse("reviews:bench", args=[row.analysis.spectrum_id]) + "#conclusion")


@page_for(*spectra_permissions.READERS)
@require_http_methods(["GET", "POST"])
def submit(request: HttpRequest, pk: int) -> HttpResponse:
    """Read once more what will be signed; sign."""
    row = selectors.version(pk)
    permissions.require(request.user, row, Action.SUBMIT)
    points, _document, content_hash = drafts.preview(row)
    form = SignatureForm(request.POST if request.method == "POST" else None, initial={"content_hash": content_hash})
    if form.is_valid():
        try:
            proof = signing.prove(request, password=form.cleaned_data["password"])
            drafts.submit(version_id=pk, by=request.user, proof=proof, content_hash=form.cleaned_data["content_hash"])
        except BadInput as error:
            add_error(form, error)
        else:
            messages.success(request, "Signed and submitted. A second person reads it now.")
            return redirect("reviews:review", pk=pk)
    examination = selectors.examination(row.interpretation.examination_id)
    return render(
        request,
        "reviews/sign_conclusion.html",
        {
            "crumbs": presenting.crumbs(examination),
            "headline": f"Sign and submit {presenting.title_of(examination)}, version {row.number}",
            "chip": row.state,
            "facts": presenting.headline_facts(examination),
            "conclusion": {
                "value": row.conclusion,
                "agrees": presenting.CONCLUSION_AGREES[row.conclusion],
                "text": row.conclusion_text,
            },
            "changes": [
                {
                    "title": claim.title,
                    "computed": {"verdict": claim.computed_verdict, "agrees": claim.computed_agrees}
                    if claim.computed_verdict
                    else None,
                    "analyst": {"verdict": claim.verdict, "agrees": claim.agrees},
                    "reason": claim.reason,
                }
                for claim in row.claims.all()
                if claim.status in ("changed", "added")
            ],
            "spectra": [
                {
                    "label": f"{spectrum.get_role_display()}, {spectrum.get_technique_display()}",
                    "file": spectrum.upload.file_name,
                    "sha256": spectrum.upload.raw_file.sha256,
                }
                for spectrum in spectra_selectors.spectra_of(examination)
            ],
            "points": [point.title for point in points],
            "form": form,
            "sign_url": reverse("reviews:submit", args=[pk]),
            "meaning": "performed",
            "content_hash": content_hash,
            "bench_url": reverse("reviews:bench", args=[row.analysis.spectrum_id]),
        },
        status=422 if form.errors else 200,
    )
