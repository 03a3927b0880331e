"""What a person writes is kept whole or refused with its field; nothing is cut silently."""

from __future__ import annotations

import pytest

from labsite.errors import BadInput
from reviews.models import Claim, InterpretationVersion
from reviews.services import drafts, reviewing
from spectra.services import uploads
from spectra.services.uploads import MeasurementFacts
from tests import builders

LONG = "x" * 4001
LONGEST = "x" * 4000


def refused(field: str, act) -> None:
    with pytest.raises(BadInput) as error:
        act()
    assert (error.value.code, error.value.params["field"]) == ("text.too_long", field)


def test_an_analysts_texts_are_bounded(cast, lab, quick_computing):
    version = builders.drafted_version(cast, lab)
    claim = version.claims.get(key="group:ester")
    who = {"version_id": version.pk, "by": cast.analyst}
    change = {"claim_id": claim.pk, "verdict": "undecided", "edits": None}
    added = {"kind": "group", "verdict": "supported"}
    refused("reason", lambda: drafts.change_claim(**who, **change, reason=LONG))
    refused("reason", lambda: drafts.add_claim(**who, **added, title="Nitrile", reason=LONG))
    refused("title", lambda: drafts.add_claim(**who, **added, title="N" * 201, reason="seen"))
    refused("reason", lambda: drafts.remove_claim(**who, claim_id=claim.pk, reason=LONG))
    conclude = {"conclusion": "inconclusive", "edits": None}
    refused("conclusion_text", lambda: drafts.write_conclusion(**who, **conclude, text=LONG))
    drafts.change_claim(**who, **change, reason=f"  {LONGEST}  ")
    drafts.add_claim(**who, **added, title="N" * 200, reason=LONGEST)
    drafts.write_conclusion(**who, **conclude, text=LONGEST)
    assert Claim.objects.get(pk=claim.pk).reason == LONGEST
    assert Claim.objects.filter(title="N" * 200, reason=LONGEST).exists()
    assert InterpretationVersion.objects.get(pk=version.pk).conclusion_text == LONGEST


def test_taking_a_claim_back_needs_a_reason(cast, lab, quick_computing):
    version = builders.drafted_version(cast, lab)
    who = {"version_id": version.pk, "by": cast.analyst}
    claim = drafts.add_claim(**who, kind="group", verdict="supported", title="Nitrile", reason="a band at 2240")
    for nothing in ("", " \n "):
        with pytest.raises(BadInput) as error:
            drafts.remove_claim(**who, claim_id=claim.pk, reason=nothing)
        assert error.value.params["field"] == "reason"
    assert Claim.objects.filter(pk=claim.pk).exists()


def test_a_reviewers_texts_are_bounded(cast, lab, quick_computing):
    version = builders.taken_version(cast, lab)
    builders.see_everything(version, cast.reviewer)
    point = version.points.get(key="conclusion")
    who = {"version_id": version.pk, "point_id": point.pk}
    disagree = {"by": cast.reviewer, "judgement": "disagree"}
    refused("comment", lambda: reviewing.judge_point(**who, **disagree, comment=LONG))
    reviewing.judge_point(**who, **disagree, comment=LONGEST)
    refused("answer", lambda: reviewing.answer_disagreement(**who, by=cast.analyst, answer=LONG))
    reviewing.answer_disagreement(**who, by=cast.analyst, answer=LONGEST)
    refused("settlement", lambda: reviewing.settle_disagreement(**who, by=cast.reviewer, settlement=LONG))
    reviewing.settle_disagreement(**who, by=cast.reviewer, settlement=LONGEST)
    sign = {"version_id": version.pk, "content_hash": version.content_hash}
    proof = builders.proof_of(cast.reviewer)
    signer = {"by": cast.reviewer, "proof": proof}
    refused("comment", lambda: reviewing.approve(**sign, **signer, comment=LONG))
    refused("reason", lambda: reviewing.reject(**sign, **signer, reasons=[{"text": LONG}]))
    assert reviewing.approve(**sign, **signer, comment=LONGEST).comment == LONGEST
    qa = {"by": cast.qa_manager, "proof": builders.proof_of(cast.qa_manager)}
    refused("reason", lambda: reviewing.withdraw(**sign, **qa, reason=LONG))
    refused("reason", lambda: drafts.revise(version_id=version.pk, by=cast.analyst, reason=LONG))
    assert reviewing.withdraw(**sign, **qa, reason=LONGEST).reason == LONGEST


def test_a_reason_for_a_role_and_what_is_stated_beside_a_file_are_bounded(cast, lab, quick_computing):
    row = builders.examination(cast, lab)
    spectrum = builders.analysed_spectrum(cast, row)
    refused(
        "reason",
        lambda: uploads.change_role(spectrum_id=spectrum.pk, by=cast.analyst, role="excluded", reason=LONG),
    )
    for field, longest in (("background_note", 200), ("already_processed", 300), ("measured_at_text", 80)):
        facts = MeasurementFacts(**{field: "x" * (longest + 1)})
        refused(
            field,
            lambda facts=facts: uploads.bring_file(
                examination_id=row.pk,
                by=cast.analyst,
                file_name="a.dx",
                data=builders.jcamp_file(seed=4),
                facts=facts,
            ),
        )
