"""Deliveries and samples: registering, finding, bringing in files."""

from __future__ import annotations

from urllib.parse import urlencode

from django.conf import settings
from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_GET, require_http_methods, require_POST

from labsite.accounts.permissions import page_for
from labsite.errors import BadInput, DomainError
from reviews import permissions, presenting, selectors
from reviews.forms import AnswerForm, DeliveryForm, RoleForm, UploadForm
from reviews.services import drafts
from reviews.transitions import Action
from spectra import permissions as spectra_permissions
from spectra import selectors as spectra_selectors
from spectra.models import Examination, Sample, Upload
from spectra.services import analyses, receiving, uploads

PAGE = 50


@page_for(*spectra_permissions.READERS)
@require_GET
def samples(request: HttpRequest) -> HttpResponse:
    text = request.GET.get("text", "")[:100]
    before = request.GET.get("before", "")
    found = spectra_selectors.find_samples(
        text=text, before_pk=int(before) if before.isdecimal() and len(before) < 19 else None, limit=PAGE + 1
    )
    shown = found[:PAGE]
    older = "?" + urlencode({"text": text, "before": shown[-1].pk}) if len(found) > PAGE else ""
    return render(
        request,
        "reviews/samples.html",
        {
            "search": {"url": reverse("reviews:samples"), "text": text},
            "rows": presenting.sample_rows(shown),
            "newer_url": "?" + urlencode({"text": text}) if before else "",
            "older_url": older,
            "register_url": reverse("reviews:register_delivery")
            if spectra_permissions.may_analyse(request.user)
            else "",
        },
    )


@page_for(*spectra_permissions.READERS)
@require_http_methods(["GET", "POST"])
def register_delivery(request: HttpRequest) -> HttpResponse:
    spectra_permissions.require_analyst(request.user)
    if request.method == "POST":
        form = DeliveryForm(request.POST)
        if form.is_valid():
            asked = form.cleaned_data
            try:
                delivery = receiving.register_delivery(
                    by=request.user,
                    material_version_id=asked["material"].pk,
                    supplier=asked["supplier"],
                    lot=asked["lot"],
                    received_on=asked["received_on"],
                    due_on=asked["due_on"],
                    priority=asked["priority"],
                    containers_total=asked["containers_total"],
                    sampled_containers=asked["sampled_containers"],
                    composite=asked["composite"],
                    form=asked["form"],
                )
            except DomainError as error:
                add_error(form, error)
            else:
                return _after_registering(delivery)
    else:
        form = DeliveryForm(initial=_initial(request))
    return render(
        request,
        "reviews/register_delivery.html",
        {"form": form, "materials": spectra_selectors.approved_material_versions()},
        status=422 if form.errors else 200,
    )


def _initial(request: HttpRequest) -> dict[str, object]:
    """What is already known: the chosen material, and what its last delivery said."""
    chosen = request.GET.get("material", "")
    if not chosen.isdecimal() or len(chosen) > 18:
        return {}
    material = spectra_selectors.material_version(int(chosen))
    last = spectra_selectors.last_delivery_of(material)
    known: dict[str, object] = {"material": material.pk}
    if last is not None:
        known |= {"supplier": last.supplier, "containers_total": last.containers_total}
    return known


def _after_registering(delivery) -> HttpResponse:
    only = list(delivery.samples.all()[:2])
    if len(only) == 1:
        return redirect("reviews:sample", pk=only[0].pk)
    return redirect("reviews:delivery", pk=delivery.pk)


def add_error(form, error: DomainError) -> None:
    """A service's refusal beside the field it names, or above the form."""
    field = error.params.get("field")
    text = f"{error.message} {error.remedy}".strip()
    form.add_error(field if field in form.fields else None, text)


@page_for(*spectra_permissions.READERS)
@require_GET
def delivery(request: HttpRequest, pk: int) -> HttpResponse:
    row = spectra_selectors.delivery(pk)
    rows = presenting.sample_rows(list(row.samples.all()))
    sampled: dict[int, list[dict[str, str]]] = {}
    for sample, line in zip(row.samples.all(), rows, strict=True):
        for container in sample.containers.all():
            sampled.setdefault(container.pk, []).append({"label": sample.code, "url": line["url"]})
    material = row.material_version
    facts = [
        {"name": "declared", "value": material.name},
        {"name": "supplier", "value": row.supplier},
        {"name": "received", "value": row.received_on.isoformat()},
        {"name": "due", "value": row.due_on.isoformat() if row.due_on else "no date set"},
        {"name": "priority", "value": row.get_priority_display()},
        {"name": "sampling", "value": f"{row.containers_sampled} of {row.containers_total} containers"},
    ]
    return render(
        request,
        "reviews/delivery.html",
        {
            "crumbs": [{"label": "Samples", "url": reverse("reviews:samples")}],
            "headline": f"Lot {row.lot}, {row.code}",
            "facts": facts,
            "containers": [
                {"label": f"Container {container.number}", "samples": sampled.get(container.pk, [])}
                for container in row.containers.all()
            ],
            "samples": [line | {"state_words": ""} for line in rows],
            "cautions": material.cautions,
            "trail_url": reverse("trail:record", args=["delivery", row.pk]),
        },
    )


@page_for(*spectra_permissions.READERS)
@require_GET
def sample(request: HttpRequest, pk: int) -> HttpResponse:
    return _sample_page(request, spectra_selectors.sample(pk))


def _sample_page(
    request: HttpRequest,
    row: Sample,
    *,
    refused: list | None = None,
    upload_form: UploadForm | None = None,
    answer_forms: dict[int, AnswerForm] | None = None,
    status: int = 200,
) -> HttpResponse:
    examination = selectors.examination(row.examinations.all()[0].pk)
    versions = selectors.versions_of(examination)
    latest = versions[0] if versions else None
    spectra = list(spectra_selectors.spectra_of(examination).select_related("upload__uploaded_by"))
    panel = presenting.upload_panel(examination, request.user)
    unread = spectra_selectors.unread_uploads(examination)
    waiting = [upload for upload in unread if upload.state == "needs_answer"]
    if panel:
        form = upload_form or UploadForm(technique=examination.procedure.technique)
        panel |= {"form": form, "questions": [form[name] for name in form.fields]}
    return render(
        request,
        "reviews/sample.html",
        {
            "crumbs": presenting.crumbs(examination, to_sample=False),
            "headline": row.code,
            "chip": latest.state if latest else "",
            "facts": presenting.headline_facts(examination),
            "life": presenting.life_line(examination, latest),
            "examination": examination,
            "spectra": [presenting.spectrum_row(spectrum) for spectrum in spectra],
            "refused_now": refused or [],
            "refused": [upload for upload in unread if upload.state == "refused"],
            "questions": [
                {
                    "upload": upload,
                    "url": reverse("reviews:answer_upload", args=[upload.pk]),
                    "form": (answer_forms or {}).get(upload.pk)
                    or AnswerForm(initial=upload.answers, question=upload.question),
                }
                for upload in waiting
            ]
            if panel
            else [],
            "upload": panel,
            "role_form": RoleForm() if panel and spectra else None,
            "versions": presenting.version_rows(versions),
            "revise": {"url": reverse("reviews:revise", args=[latest.pk])}
            if latest and permissions.may(request.user, latest, Action.REVISE)
            else None,
            "earlier": [
                {"label": presenting.title_of(other), "url": presenting.sample_url(other), "at": other.opened_at}
                for other in spectra_selectors.earlier_examinations(examination).prefetch_related("samples")[:10]
            ],
            "trail_url": reverse("trail:record", args=["examination", examination.pk]),
        },
        status=status,
    )


def _sample_of(examination: Examination) -> Sample:
    return spectra_selectors.sample(examination.samples.all()[0].pk)


@page_for(*spectra_permissions.READERS)
@require_POST
def upload(request: HttpRequest, pk: int) -> HttpResponse:
    """Every file on its own: one that is refused stops none of the others."""
    examination = selectors.examination(pk)
    spectra_permissions.require_analyst(request.user)
    files = request.FILES.getlist("files")
    form = UploadForm(request.POST, technique=examination.procedure.technique)
    if not files or len(files) > settings.UPLOAD_MAX_FILES:
        form.add_error(None, f"Choose 1 to {settings.UPLOAD_MAX_FILES} files.")
    if not form.is_valid():
        return _sample_page(request, _sample_of(examination), upload_form=form, status=422)
    asked = form.cleaned_data
    facts = uploads.MeasurementFacts(
        technique=asked["technique"],
        accessory_id=asked["accessory"].pk if asked["accessory"] else None,
        prepared_by_id=asked["prepared_by"].pk if asked["prepared_by"] else None,
        measured_by_id=asked["measured_by"].pk if asked["measured_by"] else None,
        already_processed=asked["already_processed"],
    )
    refused, read = [], 0
    for file in files:
        try:
            brought = uploads.bring_file(
                examination_id=pk, by=request.user, file_name=file.name or "", data=file.read(), facts=facts
            )
        except DomainError as error:
            refused.append(
                {"file": uploads.clean_file_name(file.name or ""), "message": error.message, "remedy": error.remedy}
            )
            continue
        if brought.state == "refused":
            refused.append(
                {
                    "file": brought.file_name,
                    "message": brought.problem_text,
                    "remedy": brought.problem_remedy,
                    "line": brought.problem_line,
                }
            )
        elif brought.state == "read":
            read += 1
            _say_what_it_is(request, brought)
        else:
            messages.warning(request, f"{brought.file_name} needs an answer before it can be read: see below.")
    if refused:
        response = _sample_page(request, _sample_of(examination), refused=refused, status=422)
        if read:
            # The page loads itself anew when the analysis of the others ends: the refusals have to be there then too.
            for item in refused:
                messages.error(request, f"{item['file']} was refused: {item['message']} {item['remedy']}".strip())
        return response
    return redirect(presenting.sample_url(examination))


def _say_what_it_is(request: HttpRequest, brought: Upload) -> None:
    roles = ", ".join(dict.fromkeys(spectrum.get_role_display() for spectrum in brought.spectra.all()))
    messages.success(request, f"{brought.file_name} was read and stored: {roles} spectrum.")
    for spectrum in brought.spectra.all():
        if sentence := selectors.same_file_sentence(spectrum):
            messages.warning(request, sentence)


@page_for(*spectra_permissions.READERS)
@require_POST
def answer_upload(request: HttpRequest, pk: int) -> HttpResponse:
    waiting = spectra_selectors.upload(pk)
    form = AnswerForm(request.POST, question=waiting.question)
    if form.is_valid():
        try:
            answered = uploads.answer_upload(
                upload_id=pk, by=request.user, answers=form.cleaned_data, facts=uploads.MeasurementFacts()
            )
        except BadInput as error:
            add_error(form, error)
        else:
            if answered.state == "read":
                messages.success(request, f"{answered.file_name} was read.")
            else:
                messages.error(request, f"{answered.file_name}: {answered.problem_text} {answered.problem_remedy}")
            return redirect(presenting.sample_url(answered.examination))
    row = _sample_of(selectors.examination(waiting.examination_id))
    return _sample_page(request, row, answer_forms={pk: form}, status=422)


@page_for(*spectra_permissions.READERS)
@require_GET
def spectrum_row(request: HttpRequest, pk: int) -> HttpResponse:
    """One row of the spectra table while its analysis is on its way; the whole page once it has ended."""
    asked = request.GET.get("asked", "0")
    spectrum = spectra_selectors.spectrum_with_analyses(pk)
    row = presenting.spectrum_row(spectrum, asked=int(asked) if asked.isdecimal() and len(asked) < 6 else 0)
    response = render(request, "reviews/_spectrum_row.html", {"spectrum": row})
    if row["analysis_state"] in ("done", "failed"):
        response["HX-Refresh"] = "true"
    return response


@page_for(*spectra_permissions.READERS)
@require_POST
def change_role(request: HttpRequest, pk: int) -> HttpResponse:
    spectrum = uploads.change_role(
        spectrum_id=pk,
        by=request.user,
        role=request.POST.get("role", ""),
        reason=request.POST.get("reason", ""),
    )
    messages.success(request, f"{spectrum.upload.file_name} is now {spectrum.get_role_display()}.")
    return redirect(presenting.sample_url(selectors.examination(spectrum.examination_id)))


@page_for(*spectra_permissions.READERS)
@require_POST
def retry(request: HttpRequest, pk: int) -> HttpResponse:
    again = analyses.retry(analysis_id=pk, by=request.user)
    messages.success(request, "The analysis was queued again.")
    return redirect(presenting.sample_url(selectors.examination(again.spectrum.examination_id)))


@page_for(*spectra_permissions.READERS)
@require_POST
def revise(request: HttpRequest, pk: int) -> HttpResponse:
    reason = request.POST.get("reason", "").strip() or _rejection_words(pk)
    version = drafts.revise(version_id=pk, by=request.user, reason=reason)
    messages.success(request, f"Version {version.number} begins where version {version.number - 1} ended.")
    return redirect("reviews:bench", pk=version.analysis.spectrum_id)


def _rejection_words(pk: int) -> str:
    """A revision after a rejection answers the reviewer's reasons; any other one has to say its own."""
    decision = getattr(selectors.version(pk), "decision", None)
    if decision is None or not decision.reasons:
        return ""
    return "Answers the rejection: " + "; ".join(reason["text"] for reason in decision.reasons)
