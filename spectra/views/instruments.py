"""Instruments, their accessories, qualification and performance checks."""

from __future__ import annotations

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_GET, require_http_methods

from spectra import permissions, selectors_master
from spectra.forms import AccessoryFormSet, CheckForm, InstrumentForm, QualificationForm
from spectra.models import Instrument
from spectra.services import instruments as services

from .common import attempt, bound, checkers_only, form_page, owners_only, readers_only


@require_GET
@readers_only
def instruments(request: HttpRequest) -> HttpResponse:
    context = {"states": selectors_master.instruments(), "may_draft": permissions.may_own_methods(request.user)}
    return render(request, "spectra/instruments.html", context)


@require_GET
@readers_only
def instrument(request: HttpRequest, pk: int) -> HttpResponse:
    state = selectors_master.instrument(pk)
    user = request.user
    context = {
        "state": state,
        "row": state.instrument,
        "checks": selectors_master.checks_of(state.instrument),
        "may_draft": permissions.may_own_methods(user),
        "may_check": permissions.may_analyse(user) or permissions.may_own_methods(user),
    }
    return render(request, "spectra/instrument.html", context)


@require_http_methods(["GET", "POST"])
@owners_only
def new_instrument(request: HttpRequest) -> HttpResponse:
    form = bound(request, InstrumentForm)
    rows = AccessoryFormSet(request.POST if request.method == "POST" else None, prefix="accessory")
    instrument, status = attempt(
        form,
        lambda: services.register_instrument(by=request.user, **form.cleaned_data, accessories=rows.values()),
        rows,
    )
    if instrument is not None:
        messages.success(request, f"{instrument.code} was registered. Record its qualification and its first checks.")
        return redirect("spectra:instrument", instrument.pk)
    return form_page(
        request,
        form,
        status=status,
        title="Register an instrument",
        submit="Register",
        crumbs=[("Instruments", reverse("spectra:instruments"))],
        template="spectra/instrument_form.html",
        accessories=rows,
    )


@require_http_methods(["GET", "POST"])
@owners_only
def new_qualification(request: HttpRequest, pk: int) -> HttpResponse:
    row = selectors_master.instrument(pk).instrument
    form = bound(request, QualificationForm)
    made, status = attempt(
        form, lambda: services.record_qualification(by=request.user, instrument_id=pk, **form.cleaned_data)
    )
    if made is not None:
        messages.success(request, "The qualification was recorded.")
        return redirect("spectra:instrument", pk)
    return form_page(
        request, form, status=status, title=f"Record a qualification of {row.code}", submit="Record", crumbs=_to(row)
    )


@require_http_methods(["GET", "POST"])
@checkers_only
def new_check(request: HttpRequest, pk: int) -> HttpResponse:
    accessory = selectors_master.accessory(pk)
    form = bound(request, CheckForm, accessory=accessory)

    def record() -> object:
        data = form.cleaned_data
        return services.record_check(
            by=request.user,
            accessory_id=pk,
            performed_at=data["performed_at"],
            valid_until=data["valid_until"],
            verdict=data["verdict"],
            note=data["note"],
            data=data["film"].read() if data["film"] else None,
        )

    made, status = attempt(form, record)
    if made is not None:
        messages.success(request, "The check was recorded.")
        return redirect("spectra:instrument", accessory.instrument_id)
    return form_page(
        request,
        form,
        status=status,
        title=f"Record a check of {accessory}",
        submit="Record the check",
        crumbs=_to(accessory.instrument),
        intro="The verdict is the laboratory's own, by its written procedure. A recorded check is never changed.",
    )


def _to(row: Instrument) -> list[tuple[str, str]]:
    return [("Instruments", reverse("spectra:instruments")), (row.code, reverse("spectra:instrument", args=[row.pk]))]
