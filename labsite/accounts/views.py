"""Signing in, one's own profile, and the pages by which a lab administrator looks after accounts."""

from __future__ import annotations

from collections.abc import Callable

from django import forms
from django.conf import settings
from django.contrib import messages
from django.contrib.auth import update_session_auth_hash
from django.contrib.auth.decorators import login_not_required
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils.http import url_has_allowed_host_and_scheme
from django.views.decorators.debug import sensitive_post_parameters
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from labsite.errors import BadInput, DomainError, NotAllowed, NotPossible
from labsite.trail.events import Event

from . import selectors, services, sessions
from .forms import ChangePasswordForm, NewPersonForm, ReasonForm, RoleForm, SignInForm
from .models import Role, User
from .permissions import page_for
from .proving import prove_password

ENDED = {
    "idle": "You were signed out because nothing was done for a while.",
    "age": "You were signed out because the session reached its time limit.",
    "account": "You were signed out because something about your account changed.",
}
administrators_only = page_for(Role.LAB_ADMINISTRATOR)


def refused(form: forms.Form, error: DomainError) -> None:
    """Show a refusal beside the field that it names, or above the form."""
    field = error.params.get("field")
    text = f"{error.message} {error.remedy}".strip()
    form.add_error(field if field in form.fields else None, text)


def _answer(form: forms.Form, status: int) -> int:
    """The status of a page with `form`: where the form itself refused what was typed, nothing else has set one."""
    return BadInput.status if form.errors and status == 200 else status


@login_not_required
@sensitive_post_parameters("password")
@require_http_methods(["GET", "POST"])
def sign_in(request: HttpRequest) -> HttpResponse:
    wanted = request.POST.get("next") or request.GET.get("next", "")
    if not url_has_allowed_host_and_scheme(
        wanted, allowed_hosts={request.get_host()}, require_https=request.is_secure()
    ):
        wanted = ""
    if request.user.is_authenticated:
        return redirect(wanted or "home")
    form, status = SignInForm(request.POST if request.method == "POST" else None), 200
    if form.is_valid():
        try:
            user = sessions.sign_in(request, **form.cleaned_data)
            _tell_of_resets(request, user)
            return redirect(wanted or "home")
        except NotAllowed as error:
            refused(form, error)
            status = error.status
    context = {
        "form": form,
        "next": wanted,
        "ended": ENDED.get(request.GET.get("ended", ""), ""),
        "nobody_yet": not selectors.anybody(),
    }
    return render(request, "accounts/sign_in.html", context, status=_answer(form, status))


def _tell_of_resets(request: HttpRequest, user: User) -> None:
    """At the first sign-in with a temporary password, name every reset of late: one that the person did not ask for
    means that somebody else may have signed in as them."""
    if not user.must_change_password:
        return
    for reset in selectors.recent_resets(person=user):
        by = reset.by.printed_name if reset.by else "the system"
        messages.warning(
            request,
            f"Your password was reset by {by} on {reset.at:%Y-%m-%d at %H:%M} UTC. Reason: {reset.reason.rstrip('.')}."
            " If you did not ask for that, tell the QA manager.",
        )


@login_not_required
@require_POST
def sign_out(request: HttpRequest) -> HttpResponse:
    sessions.sign_out(request)
    return redirect("accounts:sign_in")


@require_safe
def profile(request: HttpRequest) -> HttpResponse:
    return render(
        request, "accounts/profile.html", {"roles": [Role(role).label for role in sorted(request.user.roles)]}
    )


@sensitive_post_parameters()
@require_http_methods(["GET", "POST"])
def change_password(request: HttpRequest) -> HttpResponse:
    shortest = settings.AUTH_PASSWORD_VALIDATORS[0]["OPTIONS"]["min_length"]
    form, status = ChangePasswordForm(request.POST if request.method == "POST" else None, shortest=shortest), 200
    if form.is_valid():
        try:
            prove_password(
                request,
                form.cleaned_data["current_password"],
                event=Event.SESSION_SIGN_IN_FAILED,
                what="password change",
                field="current_password",
            )
            user = services.change_own_password(by=request.user, new_password=form.cleaned_data["new_password"])
        except (BadInput, NotAllowed) as error:
            refused(form, error)
            status = error.status
        else:
            update_session_auth_hash(request, user)
            sessions.start(request, user)
            messages.success(request, "Your password was changed. Your other sessions have ended.")
            return redirect("accounts:profile")
    return render(request, "accounts/change_password.html", {"form": form}, status=_answer(form, status))


@require_safe
@administrators_only
def people(request: HttpRequest) -> HttpResponse:
    return render(
        request,
        "accounts/people.html",
        {"people": selectors.people(), "small_laboratory": selectors.small_laboratory()},
    )


@require_http_methods(["GET", "POST"])
@administrators_only
def new_person(request: HttpRequest) -> HttpResponse:
    form, status = NewPersonForm(request.POST if request.method == "POST" else None), 200
    if form.is_valid():
        try:
            user, password = services.create_user(by=request.user, **form.cleaned_data)
            return _show_password(request, user, password)
        except (BadInput, NotPossible) as error:
            refused(form, error)
            status = error.status
    return render(request, "accounts/new_person.html", {"form": form}, status=_answer(form, status))


@require_safe
@administrators_only
def person(request: HttpRequest, user_id: int) -> HttpResponse:
    return _person_page(request, user_id)


def _person_page(
    request: HttpRequest, user_id: int, *, wrong: str = "", form: forms.Form | None = None
) -> HttpResponse:
    """The page of one account; `wrong` names the action whose `form` was refused."""
    user = selectors.account(user_id)
    held = [(role, label) for role, label in Role.choices if role in user.roles]
    open_roles = [(role, label) for role, label in Role.choices if role not in user.roles]
    context = {
        "person": user,
        "held": held,
        "open_roles": open_roles,
        "history": selectors.role_history(user),
        "is_self": user.pk == request.user.pk,
        "wrong": wrong,
        "grant_form": RoleForm(auto_id="grant_%s"),
        "revoke_form": RoleForm(auto_id="revoke_%s"),
        "active_form": ReasonForm(auto_id="active_%s"),
        "reset_form": ReasonForm(auto_id="reset_%s"),
    }
    context["grant_form"].fields["role"].choices = open_roles
    context["revoke_form"].fields["role"].choices = held
    if form is not None:
        context[f"{wrong}_form"] = form
    return render(request, "accounts/person.html", context, status=422 if wrong else 200)


def _act(
    request: HttpRequest,
    user_id: int,
    which: str,
    form: forms.Form,
    service: Callable[..., object],
    done: str,
) -> HttpResponse:
    """Run `service` with what the form says; refusals go back beside the form they belong to."""
    if form.is_valid():
        try:
            service(by=request.user, user_id=user_id, **form.cleaned_data)
            messages.success(request, done)
            return redirect("accounts:person", user_id=user_id)
        except (BadInput, NotPossible) as error:
            refused(form, error)
    return _person_page(request, user_id, wrong=which, form=form)


@require_POST
@administrators_only
def grant_role(request: HttpRequest, user_id: int) -> HttpResponse:
    form = RoleForm(request.POST, auto_id="grant_%s")
    return _act(request, user_id, "grant", form, services.grant_role, "The role was given.")


@require_POST
@administrators_only
def revoke_role(request: HttpRequest, user_id: int) -> HttpResponse:
    form = RoleForm(request.POST, auto_id="revoke_%s")
    return _act(request, user_id, "revoke", form, services.revoke_role, "The role was taken back.")


@require_POST
@administrators_only
def deactivate(request: HttpRequest, user_id: int) -> HttpResponse:
    form = ReasonForm(request.POST, auto_id="active_%s")
    return _act(request, user_id, "active", form, services.deactivate, "The account was deactivated.")


@require_POST
@administrators_only
def reactivate(request: HttpRequest, user_id: int) -> HttpResponse:
    form = ReasonForm(request.POST, auto_id="active_%s")
    return _act(request, user_id, "active", form, services.reactivate, "The account is active again.")


@require_POST
@administrators_only
def reset_password(request: HttpRequest, user_id: int) -> HttpResponse:
    form = ReasonForm(request.POST, auto_id="reset_%s")
    if form.is_valid():
        try:
            user, password = services.reset_password(by=request.user, user_id=user_id, **form.cleaned_data)
            return _show_password(request, user, password)
        except (BadInput, NotPossible) as error:
            refused(form, error)
    return _person_page(request, user_id, wrong="reset", form=form)


def _show_password(request: HttpRequest, user: User, password: str) -> HttpResponse:
    # Shown in the answer itself, once: a redirect would have to store it.
    context = {"person": user, "password": password, "hours": services.TEMPORARY_PASSWORD_HOURS}
    return render(request, "accounts/temporary_password.html", context)


@require_http_methods(["GET", "POST"])
@page_for(Role.QA_MANAGER, Role.LAB_ADMINISTRATOR)
def small_laboratory(request: HttpRequest) -> HttpResponse:
    form, status = ReasonForm(request.POST if request.method == "POST" else None), 200
    allowed = selectors.small_laboratory()
    if form.is_valid():
        try:
            services.set_small_laboratory(by=request.user, allowed=not allowed, **form.cleaned_data)
            messages.success(request, "The setting was recorded.")
            return redirect("accounts:small_laboratory")
        except NotPossible as error:
            refused(form, error)
            status = error.status
    context = {
        "form": form,
        "allowed": allowed,
        "history": selectors.setting_history(settings.SMALL_LABORATORY_KEY),
        "may_set": request.user.has_role(Role.QA_MANAGER) and not request.user.has_role(Role.LAB_ADMINISTRATOR),
    }
    return render(request, "accounts/small_laboratory.html", context, status=_answer(form, status))
