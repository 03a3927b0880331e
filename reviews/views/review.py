"""The second person's page: points, verdicts side by side, the evidence, the decision with its signature."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_GET, require_POST

from labsite.accounts.models import Role
from labsite.accounts.permissions import page_for
from labsite.errors import BadInput, DomainError
from labsite.policy import plot_page
from labsite.signing import services as signing
from labsite.signing.forms import SignatureForm
from reviews import permissions, presenting, selectors
from reviews.models import InterpretationVersion
from reviews.services import reviewing
from reviews.transitions import WITH_REVIEWER, Action, State
from reviews.views.receiving import add_error
from spectra import permissions as spectra_permissions
from spectra import selectors as spectra_selectors


@page_for(*spectra_permissions.READERS)
@plot_page
@require_GET
def review(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.version(pk)
    if row.state == State.DRAFT:
        return redirect("reviews:bench", pk=row.analysis.spectrum_id)
    return _review_page(request, row)


def _review_page(
    request: HttpRequest,
    row: InterpretationVersion,
    *,
    approve: dict | None = None,
    reject: dict | None = None,
    withdraw: dict | None = None,
    status: int = 200,
) -> HttpResponse:
    user = request.user
    examination = selectors.examination(row.interpretation.examination_id)
    result = spectra_selectors.result_of(row.analysis)
    decision = getattr(row, "decision", None)
    reviewer = decision.by if decision else row.taken_by
    points = presenting.point_items(row, reviewer, user)
    rows = presenting.review_rows(row, result, points)
    deciding = permissions.may(user, row, Action.APPROVE)
    blockers = selectors.approval_blockers(row, user) if deciding else []
    opened = sum(1 for point in points if point["opened_at"])
    context = {
        "crumbs": presenting.crumbs(examination),
        "headline": f"Review of {presenting.title_of(examination)}, version {row.number}",
        "chip": row.state,
        "facts": presenting.headline_facts(examination) + presenting.measurement_facts(row.analysis.spectrum),
        "life": presenting.life_line(examination, row),
        "version": row,
        "points": points,
        "opened": opened,
        "total": len(points),
        "may_judge": deciding,
        "reviewer_label": "you" if reviewer == user else reviewer.printed_name if reviewer else "reviewer",
        "findings": presenting.measurement_cautions(row.analysis.spectrum, result),
        "rows": rows,
        "differing": sum(1 for line in rows if line["differs"]),
        "conclusion": {
            "value": row.conclusion,
            "agrees": presenting.CONCLUSION_AGREES[row.conclusion],
            "text": row.conclusion_text,
            "by": row.submitted_by.printed_name,
        },
        "plot": presenting.plot(row.analysis.spectrum, row.analysis, result),
        "masked": result.get("masked", []),
        "bands": presenting.band_rows(result),
        "relative": presenting.is_relative(result),
        "impurities": result.get("impurities"),
        "bench_url": reverse("reviews:bench", args=[row.analysis.spectrum_id]),
        "content_hash": row.content_hash,
        "submitted": {
            "by": row.submitted_by.printed_name,
            "at": row.submission.signed_at,
            "meaning": row.submission.get_meaning_display(),
            "printed_name": row.submission.printed_name,
        },
        "contributors": presenting.contributors(examination),
        "cautions": examination.delivery.material_version.cautions,
        "take_url": reverse("reviews:take", args=[row.pk]) if permissions.may(user, row, Action.TAKE) else "",
        "hand_back_url": reverse("reviews:hand_back", args=[row.pk])
        if permissions.may(user, row, Action.HAND_BACK)
        else "",
        "why_not": _why_not(request, row, deciding),
        "approve": _approve(row, blockers, approve) if deciding else None,
        "reject": _reject(row, points, reject) if deciding else None,
        "withdraw": _withdraw(row, withdraw) if permissions.may(user, row, Action.WITHDRAW) else None,
        "revise_url": reverse("reviews:revise", args=[row.pk])
        if permissions.may(user, row, Action.REVISE) and not row.revisions.exists()
        else "",
        "decisions": presenting.decision_notes(row),
        "trail_url": reverse("trail:record", args=["examination", examination.pk]),
    }
    context |= presenting.lanes(result, presenting.claimed_groups(row))
    return render(request, "reviews/review.html", context, status=status)


def _why_not(request: HttpRequest, row: InterpretationVersion, deciding: bool) -> str:
    if deciding or not request.user.has_role(Role.REVIEWER) or row.state not in (State.SUBMITTED, *WITH_REVIEWER):
        return ""
    action = Action.TAKE if row.state == State.SUBMITTED else Action.APPROVE
    try:
        permissions.require(request.user, row, action)
    except DomainError as error:
        return f"{error.message} {error.remedy}".strip()
    return ""


def _approve(row: InterpretationVersion, blockers: list[str], given: dict | None) -> dict[str, object]:
    return {
        "url": reverse("reviews:approve", args=[row.pk]),
        "ready": not blockers,
        "why_not": " ".join(blockers),
        "form": SignatureForm(prefix="approve", initial={"content_hash": row.content_hash}),
        "comment": "",
        "errors": {},
    } | (given or {})


def _reject(row: InterpretationVersion, points: list[dict], given: dict | None) -> dict[str, object]:
    typed = (given or {}).get("typed", {})
    return {
        "url": reverse("reviews:reject", args=[row.pk]),
        "form": SignatureForm(prefix="reject", initial={"content_hash": row.content_hash}),
        "reasons": [
            {"id": point["id"], "title": point["title"], "typed": typed.get(point["id"], "")} for point in points
        ],
        "general": "",
        "errors": {},
    } | (given or {})


def _withdraw(row: InterpretationVersion, given: dict | None) -> dict[str, object]:
    return {
        "url": reverse("reviews:withdraw", args=[row.pk]),
        "form": SignatureForm(prefix="withdraw", initial={"content_hash": row.content_hash}),
        "reason": "",
        "errors": {},
    } | (given or {})


@page_for(*spectra_permissions.READERS)
@require_POST
def take(request: HttpRequest, pk: int) -> HttpResponse:
    reviewing.take(version_id=pk, by=request.user)
    return redirect("reviews:review", pk=pk)


@page_for(*spectra_permissions.READERS)
@require_POST
def hand_back(request: HttpRequest, pk: int) -> HttpResponse:
    reviewing.hand_back(version_id=pk, by=request.user)
    messages.success(request, "Handed back. Another reviewer can take it now.")
    return redirect("reviews:today")


def _points_answer(request: HttpRequest, pk: int, point_pk: int, *, errors: dict | None = None) -> HttpResponse:
    """The list of points with what a step changed elsewhere, when htmx asks; else the page at the point."""
    row = selectors.version(pk)
    if request.headers.get("HX-Request") != "true" and not errors:
        return redirect(reverse("reviews:review", args=[pk]) + f"#point-{point_pk}")
    points = presenting.point_items(row, row.taken_by, request.user)
    for item in points:
        if item["id"] == point_pk and errors:
            item |= errors
    deciding = permissions.may(request.user, row, Action.APPROVE)
    blockers = selectors.approval_blockers(row, request.user) if deciding else []
    context = {
        "points": points,
        "opened": sum(1 for point in points if point["opened_at"]),
        "total": len(points),
        "may_judge": deciding,
        "version": row,
        "content_hash": row.content_hash,
        "approve": _approve(row, blockers, None) if deciding else None,
        "out_of_band": True,
    }
    return render(request, "reviews/_points_answer.html", context)


@page_for(*spectra_permissions.READERS)
@require_POST
def open_point(request: HttpRequest, pk: int, point_pk: int) -> HttpResponse:
    reviewing.open_point(version_id=pk, point_id=point_pk, by=request.user)
    return _points_answer(request, pk, point_pk)


def _written(request: HttpRequest, pk: int, point_pk: int, field: str, act) -> HttpResponse:
    """Do a step that carries a text; what was typed stays on the page when it is refused."""
    try:
        act()
    except BadInput as error:
        errors = {"errors": {field: error.message}, "typed": request.POST.get(field, "")}
        return _points_answer(request, pk, point_pk, errors=errors)
    return _points_answer(request, pk, point_pk)


@page_for(*spectra_permissions.READERS)
@require_POST
def judge_point(request: HttpRequest, pk: int, point_pk: int) -> HttpResponse:
    return _written(
        request,
        pk,
        point_pk,
        "note",
        lambda: reviewing.judge_point(
            version_id=pk,
            point_id=point_pk,
            by=request.user,
            judgement=request.POST.get("judgement", ""),
            comment=request.POST.get("note", ""),
        ),
    )


@page_for(*spectra_permissions.READERS)
@require_POST
def answer_point(request: HttpRequest, pk: int, point_pk: int) -> HttpResponse:
    return _written(
        request,
        pk,
        point_pk,
        "answer",
        lambda: reviewing.answer_disagreement(
            version_id=pk, point_id=point_pk, by=request.user, answer=request.POST.get("answer", "")
        ),
    )


@page_for(*spectra_permissions.READERS)
@require_POST
def settle_point(request: HttpRequest, pk: int, point_pk: int) -> HttpResponse:
    return _written(
        request,
        pk,
        point_pk,
        "settlement",
        lambda: reviewing.settle_disagreement(
            version_id=pk, point_id=point_pk, by=request.user, settlement=request.POST.get("settlement", "")
        ),
    )


def _signed(request: HttpRequest, form: SignatureForm, act: Callable[..., object]) -> bool:
    """Prove the password and do the act over the hash that was shown. A refusal stands in the form afterwards."""
    if not form.is_valid():
        return False
    try:
        proof = signing.prove(request, password=form.cleaned_data["password"])
        act(by=request.user, proof=proof, content_hash=form.cleaned_data["content_hash"])
    except BadInput as error:
        add_error(form, error)
        return False
    return True


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def approve(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.version(pk)
    permissions.require(request.user, row, Action.APPROVE)
    form = SignatureForm(request.POST, prefix="approve")
    comment = request.POST.get("comment", "")
    if _signed(request, form, partial(reviewing.approve, version_id=pk, comment=comment)):
        messages.success(request, f"Version {row.number} is approved.")
        return redirect("reviews:review", pk=pk)
    return _review_page(request, row, approve={"form": form, "comment": comment}, status=422)


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def reject(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.version(pk)
    permissions.require(request.user, row, Action.REJECT)
    form = SignatureForm(request.POST, prefix="reject")
    keys = {point.pk: point.key for point in row.points.all()}
    typed = {point_pk: request.POST.get(f"reason-{point_pk}", "") for point_pk in keys}
    general = request.POST.get("general", "")
    reasons = [{"point": keys[point_pk], "text": text} for point_pk, text in typed.items()]
    reasons.append({"point": "", "text": general})
    given: dict[str, object] = {"form": form, "typed": typed, "general": general}
    if not any(reason["text"].strip() for reason in reasons):
        given["errors"] = {"reasons": "Give at least one reason: the analyst has to know what to mend."}
    elif _signed(request, form, partial(reviewing.reject, version_id=pk, reasons=reasons)):
        messages.success(request, f"Version {row.number} is rejected; the analyst sees your reasons.")
        return redirect("reviews:review", pk=pk)
    return _review_page(request, row, reject=given, status=422)


@page_for(*spectra_permissions.READERS)
@plot_page
@require_POST
def withdraw(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors.version(pk)
    permissions.require(request.user, row, Action.WITHDRAW)
    form = SignatureForm(request.POST, prefix="withdraw")
    reason = request.POST.get("reason", "")
    given: dict[str, object] = {"form": form, "reason": reason}
    if not reason.strip():
        given["errors"] = {"reason": "Say why the approved version is withdrawn."}
    elif _signed(request, form, partial(reviewing.withdraw, version_id=pk, reason=reason)):
        messages.success(request, f"Version {row.number} is withdrawn; it stays readable.")
        return redirect("reviews:review", pk=pk)
    return _review_page(request, row, withdraw=given, status=422)
