"""Today: what needs this person now, by priority and due date, then age; nothing else."""

from __future__ import annotations

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.urls import reverse
from django.utils import timezone
from django.views.decorators.http import require_GET

from labsite.accounts.models import Role, User
from labsite.accounts.permissions import page_for
from labsite.accounts.selectors import recent_resets
from labsite.trail import selectors as trail
from reviews import presenting, selectors
from reviews.models import InterpretationVersion
from reviews.transitions import State
from reviews.words import verdict_words
from spectra import permissions as spectra_permissions
from spectra import selectors as spectra_selectors


@page_for()
@require_GET
def today(request: HttpRequest) -> HttpResponse:
    user: User = request.user
    sections = []
    if user.has_role(Role.REVIEWER):
        sections.append(_proposals(user))
    if user.has_role(Role.ANALYST):
        sections += [_answers(), _sent_back(), _drafts(), _in_analysis(), _waiting_for_files()]
    if user.has_role(Role.QA_MANAGER):
        sections += [_trail_status(), _resets(), _ageing(), _overrides(), _decided()]
    if user.has_role(Role.METHOD_OWNER, Role.QA_MANAGER):
        sections += [_approvals(user), _expiring()]
    if user.has_role(Role.LAB_ADMINISTRATOR):
        sections.append(_system())
    return render(
        request,
        "reviews/today.html",
        {
            "sections": [section for section in sections if section["rows"]],
            "nothing": [section["empty"] for section in sections if not section["rows"] and section["empty"]],
            "register_url": reverse("reviews:register_delivery") if spectra_permissions.may_analyse(user) else "",
            "day": timezone.localdate(),
        },
    )


def _version_row(version: InterpretationVersion, *, since, why: str, url: str = "") -> dict[str, object]:
    return presenting.work_row(
        version.interpretation.examination,
        url=url or reverse("reviews:version", args=[version.pk]),
        state=version.state,
        since=since,
        why=why,
    )


def _proposals(user: User) -> dict[str, object]:
    rows = []
    for version in selectors.proposals_for(user):
        if version.taken_by_id == user.pk:
            why = "You have this one: open its points and decide."
        elif version.taken_by is not None:
            why = f"{version.taken_by.printed_name} is reviewing it."
        else:
            why = f"Submitted by {version.submitted_by.printed_name}: {version.get_conclusion_display()}."
        rows.append(_version_row(version, since=version.submitted_at, why=why))
    return {"title": "Waiting for a second reading", "rows": rows, "empty": "No proposal waits for you."}


def _answers() -> dict[str, object]:
    rows = [
        _version_row(
            read.point.version,
            since=read.judged_at,
            why=f"{read.reviewer.printed_name} disagrees about “{read.point.title}”: answer it.",
        )
        for read in selectors.disagreements_to_answer()
    ]
    return {"title": "Disagreements to answer", "rows": rows, "empty": "No reviewer waits for an answer."}


def _sent_back() -> dict[str, object]:
    rows = []
    for version in selectors.sent_back():
        withdrawal = getattr(version, "withdrawal", None)
        if withdrawal is not None:
            since, why = withdrawal.at, f"Withdrawn by {withdrawal.by.printed_name}: {withdrawal.reason}"
        else:
            since = version.decision.at
            why = "Rejected: " + "; ".join(reason["text"] for reason in version.decision.reasons)
        rows.append(_version_row(version, since=since, why=why))
    return {"title": "Sent back", "rows": rows, "empty": "Nothing was sent back."}


def _drafts() -> dict[str, object]:
    rows = []
    for version in selectors.waiting_versions(states=[State.DRAFT]):
        waiting = version.open_claims
        if waiting:
            why = f"{waiting} claim{'s' if waiting > 1 else ''} to confirm or change."
        else:
            why = "All claims are looked at: write the conclusion and sign."
        rows.append(_version_row(version, since=version.opened_at, why=why))
    return {"title": "To interpret", "rows": rows, "empty": "No spectrum waits to be interpreted."}


def _in_analysis() -> dict[str, object]:
    rows = []
    for examination in selectors.examinations_in_analysis():
        state = presenting.state_of(examination, None)
        why = "The analysis failed: see why, and try it again." if state == "failed" else "The analysis is on its way."
        rows.append(
            presenting.work_row(
                examination, url=presenting.sample_url(examination), state=state, since=examination.opened_at, why=why
            )
        )
    return {"title": "In analysis", "rows": rows, "empty": "No analysis is running."}


def _waiting_for_files() -> dict[str, object]:
    rows = []
    for examination in selectors.examinations_waiting_for_files():
        uploads = list(examination.uploads.all())
        asking = next((upload for upload in uploads if upload.question), None)
        refused = next((upload for upload in uploads if upload.state == "refused"), None)
        if asking:
            why = f"{asking.file_name} needs an answer before it can be read."
        elif refused:
            why = f"{refused.file_name} was refused: bring in another export."
        else:
            why = f"Measure it by {examination.procedure} and bring in the file."
        rows.append(
            presenting.work_row(
                examination,
                url=presenting.sample_url(examination),
                state="waits for a spectrum",
                since=examination.opened_at,
                why=why,
            )
        )
    return {"title": "To measure", "rows": rows, "empty": "No sample waits for a spectrum."}


def _ageing() -> dict[str, object]:
    rows = [
        _version_row(
            version,
            since=version.submitted_at,
            why=f"With {version.taken_by.printed_name}." if version.taken_by else "Nobody has taken it yet.",
        )
        for version in selectors.waiting_versions(states=[State.SUBMITTED, State.READING_BLIND, State.IN_REVIEW])
    ]
    return {"title": "Proposals waiting, by priority and due date", "rows": rows, "empty": "No proposal is waiting."}


def _overrides() -> dict[str, object]:
    rows = [
        _version_row(
            claim.version,
            since=None,
            why=f"{claim.title}: computed {verdict_words(claim.kind, claim.computed_verdict)}, set to"
            f" {verdict_words(claim.kind, claim.verdict)} by {claim.stated_by.printed_name}: {claim.reason}",
        )
        for claim in selectors.overrides()
    ]
    return {
        "title": "Where analysts differ from the computation",
        "rows": rows,
        "empty": "No computed verdict was changed.",
    }


def _trail_status() -> dict[str, object]:
    last = trail.last_verification()
    if last is None:
        words, state, why = "never verified", "", "Verify it now: it takes seconds on a young trail."
    else:
        words = f"{last.entries} entries on {selectors.utc(last.row.at)}"
        state = "whole" if last.whole else "not whole"
        why = "Verified." if last.whole else "Damage was found: " + "; ".join(last.damages[:3])
    row = {
        "label": "Last verification",
        "url": reverse("trail:verify"),
        "material": words,
        "state": state,
        "age": "",
        "due": None,
        "late": False,
        "priority": "" if last and last.whole else "high",
        "why": why,
    }
    return {"title": "The trail", "rows": [row], "empty": ""}


def _resets() -> dict[str, object]:
    rows = [
        {
            "label": item.person.printed_name,
            "url": reverse("trail:entry", args=[item.seq]),
            "material": f"by {item.by.printed_name if item.by else 'the system'}, {selectors.utc(item.at)}",
            "state": "",
            "age": "",
            "due": None,
            "late": False,
            "priority": "",
            "why": item.reason,
        }
        for item in recent_resets(days=7)
    ]
    return {
        "title": "Passwords reset in the last 7 days",
        "rows": rows,
        "empty": "No password was reset in the last 7 days.",
    }


def _decided() -> dict[str, object]:
    rows = [
        _version_row(
            version,
            since=None,
            why=f"{version.get_conclusion_display()}; {version.decision.get_verdict_display()} by"
            f" {version.decision.by.printed_name}.",
        )
        for version in selectors.recently_decided()
    ]
    return {"title": "Decided lately", "rows": rows, "empty": "Nothing was decided yet."}


def _approvals(user: User) -> dict[str, object]:
    rows = [
        {
            "label": str(item.row),
            "url": reverse("spectra:approve", args=[item.kind, item.row.pk]),
            "material": item.words,
            "state": "draft",
            "age": selectors.age_in_words(item.row.created_at),
            "due": None,
            "late": False,
            "priority": "",
            "why": "You wrote it, so somebody else approves it."
            if item.row.author_id == user.pk
            else f"Drafted by {item.row.author.printed_name}.",
        }
        for item in spectra_selectors.drafts_to_approve()
    ]
    return {"title": "Master data waiting for approval", "rows": rows, "empty": "No draft waits for approval."}


def _expiring() -> dict[str, object]:
    rows = [
        {
            "label": item.label,
            "url": reverse(item.url_name, args=item.url_args),
            "material": item.words,
            "state": "expired" if item.on < timezone.localdate() else "expires soon",
            "age": "",
            "due": item.on,
            "late": item.on < timezone.localdate(),
            "priority": "",
            "why": item.why,
        }
        for item in spectra_selectors.expiring_soon()
    ]
    return {"title": "Expired, or expiring within 30 days", "rows": rows, "empty": "Nothing expires within 30 days."}


def _system() -> dict[str, object]:
    unfinished = spectra_selectors.unfinished_analyses().count()
    failed = spectra_selectors.failed_analyses().count()
    rows = [
        {
            "label": "Work queue",
            "url": reverse("accounts:people"),
            "material": f"{unfinished} analyses waiting or running, {failed} failed and not tried again",
            "state": "",
            "age": "",
            "due": None,
            "late": False,
            "priority": "",
            "why": "Analysts see the reason of a failed analysis on its sample and try it again there.",
        }
    ]
    return {"title": "The system", "rows": rows, "empty": ""}
