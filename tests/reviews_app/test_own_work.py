"""Nobody reviews their own work: said by the predicate, decided by the service, held by the database."""

from __future__ import annotations

import pytest
from django.db import IntegrityError, connection, transaction
from django.utils import timezone

from labsite.errors import NotAllowed
from labsite.signing.models import Signature
from reviews import permissions
from reviews.models import Decision, InterpretationVersion
from reviews.services import drafts, reviewing
from reviews.transitions import Action
from spectra.services import uploads
from tests import builders
from tests.cast import make_person


@pytest.fixture
def both(cast):
    """Somebody who is analyst and reviewer."""
    return make_person("both", roles=("analyst", "reviewer"))


HANDS = ("prepared", "measured", "uploaded", "excluded", "changed_role", "claimed", "concluded", "submitted", "revised")


@pytest.fixture(params=HANDS)
def own(request, cast, lab, quick_computing, both):
    """A submitted version in which `both` had exactly one hand."""
    hand, row = request.param, builders.examination(cast, lab)
    facts = {f"{hand}_by_id": both.pk} if hand in ("prepared", "measured") else {}
    builders.analysed_spectrum(cast, row, **facts)
    other = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=2)).spectra.get()
    version = builders.version_of(row)
    if hand == "uploaded":
        person = cast.second_analyst.pk
        builders.upload(
            row, both, data=builders.jcamp_file(seed=3), prepared_by_id=person, measured_by_id=person, role="blank"
        )
    if hand == "excluded":
        uploads.change_role(spectrum_id=other.pk, by=both, role="excluded", reason="torn")
    if hand == "changed_role":
        uploads.change_role(spectrum_id=other.pk, by=both, role="repeat", reason="asked for")
    if hand == "claimed":
        drafts.confirm_claim(version_id=version.pk, claim_id=version.claims.first().pk, by=both)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, both if hand == "concluded" else cast.analyst)
    version = builders.submit(version, both if hand == "submitted" else cast.analyst)
    if hand == "revised":
        reviewing.take(version_id=version.pk, by=cast.reviewer)
        reviewing.reject(
            version_id=version.pk,
            by=cast.reviewer,
            proof=builders.proof_of(cast.reviewer),
            content_hash=version.content_hash,
            reasons=[{"text": "again"}],
        )
        version = builders.submit(drafts.revise(version_id=version.pk, by=both, reason="again"), cast.analyst)
    return version


def test_whoever_had_a_hand_in_it_cannot_take_it(own, both, cast):
    assert not permissions.may(both, own, Action.TAKE)
    with pytest.raises(NotAllowed) as refused:
        reviewing.take(version_id=own.pk, by=both)
    assert refused.value.code == "interpretation.own_work" and refused.value.status == 403
    assert permissions.may(cast.reviewer, own, Action.TAKE)


def test_the_service_refuses_even_where_it_was_taken(own, both):
    InterpretationVersion.objects.filter(pk=own.pk).update(state="in_review", taken_by=both, taken_at=timezone.now())
    for act, values in (
        (reviewing.approve, {"content_hash": own.content_hash}),
        (reviewing.reject, {"content_hash": own.content_hash, "reasons": [{"text": "no"}]}),
    ):
        with pytest.raises(NotAllowed) as refused:
            act(version_id=own.pk, by=both, proof=builders.proof_of(both), **values)
        assert refused.value.code == "interpretation.own_work"
    assert not Decision.objects.filter(version=own).exists()


def test_the_database_refuses_the_row_itself(own, both, cast):
    signature = Signature.objects.filter(kind="interpretation").order_by("-pk").first()
    with pytest.raises(IntegrityError, match="had a hand in"), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(
            "INSERT INTO reviews_decision (version_id, verdict, by_id, at, comment, reasons, signature_id)"
            " VALUES (%s, 'approved', %s, %s, '', '[]', %s)",
            [own.pk, both.pk, timezone.now(), signature.pk],
        )


def test_a_reviewer_without_a_hand_in_it_passes_all_three(own, cast):
    reviewing.take(version_id=own.pk, by=cast.reviewer)
    builders.see_everything(own, cast.reviewer)
    decision = reviewing.approve(
        version_id=own.pk, by=cast.reviewer, proof=builders.proof_of(cast.reviewer), content_hash=own.content_hash
    )
    assert decision.by == cast.reviewer
