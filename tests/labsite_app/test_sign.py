"""An electronic signature: the maker's password at that moment, once, over one content, never changed afterwards."""

from __future__ import annotations

import json
from datetime import timedelta

import pytest
from django.conf import settings
from django.db import IntegrityError, connection, transaction
from django.urls import reverse
from django.utils import timezone

from labsite.accounts import services as accounts
from labsite.errors import BadInput, NotAllowed, NotPossible
from labsite.signing import services as signing
from labsite.signing.forms import SignatureForm
from labsite.signing.models import Meaning, Proof, Signature
from labsite.trail.models import TrailEntry
from labsite.trail.record import unit_of_work
from labsite.trail.verify import verify
from tests.cast import PASSWORD, WRONG_PASSWORD, request_of
from tests.lifting import tamper

CONTENT = "ab" * 32


def prove(person, password: str = PASSWORD):
    return signing.prove(request_of(person), password=password)


def sign(person, proof=None, content_hash: str = CONTENT):
    proof = proof or prove(person)
    with unit_of_work():
        return signing.sign(
            proof=proof,
            by=person,
            kind="document",
            subject_id=5,
            content_hash=content_hash,
            meaning=Meaning.REVIEWED,
        )


def damages() -> list[str]:
    return [f"{damage.where}: {damage.what}" for damage in verify().damages]


def test_a_signature_says_who_when_and_what_it_means(cast, settings):
    settings.LABORATORY_TIME_ZONE = "Asia/Kolkata"
    signature = sign(cast.reviewer)
    assert (signature.printed_name, signature.meaning, signature.content_hash) == ("Reviewer", "reviewed", CONTENT)
    assert timezone.now() - signature.signed_at < timedelta(seconds=10)
    assert signature.laboratory_time_text.endswith("+05:30 (Asia/Kolkata)")
    entry = json.loads(bytes(TrailEntry.objects.get(event="signature.made").canonical))
    assert entry["facts"] == {
        "signature": signature.pk,
        "digest": signature.digest,
        "content_hash": CONTENT,
        "meaning": "reviewed",
    }
    assert entry["subject"]["id"] == "5" and entry["actor"]["id"] == cast.reviewer.pk
    assert verify().ok


def test_a_wrong_password_signs_nothing_and_is_recorded(cast):
    with pytest.raises(BadInput) as refusal:
        prove(cast.reviewer, WRONG_PASSWORD)
    assert (refusal.value.code, refusal.value.params["field"]) == ("signing.wrong_password", "password")
    entry = json.loads(bytes(TrailEntry.objects.get(event="signature.failed").canonical))
    assert entry["actor"]["id"] == cast.reviewer.pk
    assert not Proof.objects.exists() and not Signature.objects.exists()


def test_too_many_wrong_passwords_lock_signing_even_for_the_right_one(cast):
    for _ in range(settings.AXES_FAILURE_LIMIT - 1):
        with pytest.raises(BadInput):
            prove(cast.reviewer, WRONG_PASSWORD)
    for password in (WRONG_PASSWORD, PASSWORD):
        with pytest.raises(NotAllowed) as refusal:
            prove(cast.reviewer, password)
        assert refusal.value.code == "signing.locked_out"
    assert TrailEntry.objects.filter(event="signature.failed").count() == settings.AXES_FAILURE_LIMIT
    prove(cast.analyst)


def test_wrong_sign_ins_at_a_shared_computer_do_not_stop_a_signature_there(cast, client):
    page = reverse("accounts:sign_in")
    for username in ("qa_manager", "signing qa_manager", "SIGNING qa_manager"):
        for _ in range(settings.AXES_FAILURE_LIMIT + 1):
            answer = client.post(page, {"username": username, "password": WRONG_PASSWORD})
        assert answer.status_code == 403 and "locked for a while" in answer.content.decode()
    assert sign(cast.qa_manager).signer == cast.qa_manager


def test_wrong_signatures_lock_no_sign_in(cast, client):
    for _ in range(settings.AXES_FAILURE_LIMIT + 1):
        with pytest.raises((BadInput, NotAllowed)):
            prove(cast.reviewer, WRONG_PASSWORD)
    answer = client.post(reverse("accounts:sign_in"), {"username": "reviewer", "password": PASSWORD})
    assert answer.status_code == 302
    with pytest.raises(NotAllowed):  # and signing in does not unlock signing
        prove(cast.reviewer)


def test_a_right_password_forgets_earlier_failures(cast):
    for _ in range(settings.AXES_FAILURE_LIMIT * 2):
        with pytest.raises(BadInput):
            prove(cast.reviewer, WRONG_PASSWORD)
        prove(cast.reviewer)


def test_a_proof_is_good_for_one_signature(cast):
    proof = prove(cast.reviewer)
    sign(cast.reviewer, proof)
    with pytest.raises(NotPossible) as refusal:
        sign(cast.reviewer, proof)
    assert refusal.value.code == "signing.proof_used"
    assert Signature.objects.count() == 1


def test_a_proof_of_a_unit_that_was_undone_can_still_be_used(cast):
    proof = prove(cast.reviewer)
    with pytest.raises(ValueError), unit_of_work():
        signing.sign(
            proof=proof, by=cast.reviewer, kind="k", subject_id=1, content_hash=CONTENT, meaning=Meaning.REVIEWED
        )
        raise ValueError
    assert not Signature.objects.exists()
    sign(cast.reviewer, proof)


def test_a_proof_runs_out(cast):
    proof = prove(cast.reviewer)
    tamper("UPDATE signing_proof SET expires_at = %s", timezone.now() - timedelta(seconds=1))
    with pytest.raises(NotPossible):
        sign(cast.reviewer, proof)


def test_nobody_signs_for_another_person(cast):
    with pytest.raises(NotAllowed) as refusal:
        sign(cast.reviewer, prove(cast.analyst))
    assert refusal.value.code == "signing.other_person"
    forged = signing.SigningProof(prove(cast.analyst).nonce, cast.reviewer.pk)
    with pytest.raises(NotPossible):
        sign(cast.reviewer, forged)
    with pytest.raises(BadInput):
        signing.prove(request_of(cast.reviewer), password="the password of somebody else")
    assert not Signature.objects.exists()


def test_a_deactivated_person_does_not_sign(cast):
    proof = prove(cast.reviewer)
    user = accounts.deactivate(by=cast.administrator, user_id=cast.reviewer.pk, reason="left")
    with pytest.raises(NotAllowed):
        sign(user, proof)


def test_a_temporary_password_does_not_sign(cast):
    user, temporary = accounts.reset_password(by=cast.administrator, user_id=cast.reviewer.pk, reason="forgotten")
    with pytest.raises(NotAllowed) as refusal:
        prove(user, temporary)
    assert refusal.value.code == "signing.temporary_password"


def test_proving_under_a_lock_and_signing_without_one_are_programming_errors(cast):
    with pytest.raises(RuntimeError), unit_of_work():
        prove(cast.reviewer)
    with pytest.raises(RuntimeError):
        signing.sign(
            proof=prove(cast.reviewer),
            by=cast.reviewer,
            kind="k",
            subject_id=1,
            content_hash=CONTENT,
            meaning=Meaning.REVIEWED,
        )


@pytest.mark.parametrize("content_hash", ["", "AB" * 32, "ab" * 31, "not a hash", "ab" * 32 + "\n"])
def test_only_a_hash_can_be_signed(cast, content_hash):
    with pytest.raises(ValueError):
        sign(cast.reviewer, content_hash=content_hash)


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE signing_signature SET meaning = 'approved'",
        "DELETE FROM signing_signature",
        "UPDATE signing_proof SET used_at = NULL",
    ],
)
def test_the_database_refuses_to_change_a_signature(cast, statement):
    sign(cast.reviewer)
    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)


@pytest.mark.parametrize(
    ("column", "value"),
    [
        ("meaning", "approved"),
        ("content_hash", "cd" * 32),
        ("subject_id", "6"),
        ("kind", "paper"),
        ("printed_name", "Somebody"),
        ("signed_at", "2020-01-01 00:00:00+00:00"),
        ("laboratory_time_text", "yesterday"),
    ],
)
def test_a_changed_signature_is_named(cast, column, value):
    signature = sign(cast.reviewer)
    tamper(f"UPDATE signing_signature SET {column} = %s", value)
    assert damages()[0] == (f"signature {signature.pk}: it was changed: it no longer gives the digest it was made with")


def test_a_signature_given_to_another_person_is_named(cast):
    signature = sign(cast.reviewer)
    tamper("UPDATE signing_signature SET signer_id = %s", cast.analyst.pk)
    assert damages()[0].startswith(f"signature {signature.pk}: it was changed")


def test_two_swapped_signatures_are_named(cast):
    first, second = sign(cast.reviewer), sign(cast.qa_manager, content_hash="cd" * 32)
    columns = ("content_hash", "signer_id", "printed_name", "signed_at", "laboratory_time_text", "digest")
    setters = ", ".join(f"{column} = %s" for column in columns)
    tamper("UPDATE signing_signature SET digest = 'aside' WHERE id = %s", first.pk)
    tamper(
        f"UPDATE signing_signature SET {setters} WHERE id = %s",
        *(getattr(first, column) for column in columns),
        second.pk,
    )
    tamper(
        f"UPDATE signing_signature SET {setters} WHERE id = %s",
        *(getattr(second, column) for column in columns),
        first.pk,
    )
    assert [line.split(":")[0] for line in damages()] == [f"signature {first.pk}", f"signature {second.pk}"]


def test_a_removed_and_an_invented_signature_are_named(cast):
    first, second = sign(cast.reviewer), sign(cast.reviewer)
    tamper("DELETE FROM signing_signature WHERE id = %s", first.pk)
    assert damages() == [
        f"signature {first.pk}: it was removed; entry"
        f" {TrailEntry.objects.filter(event='signature.made').order_by('seq').first().seq} says that it was made"
    ]
    tamper("UPDATE signing_signature SET id = 99 WHERE id = %s", second.pk)
    assert "signature 99: no entry of the trail says that it was made" in damages()


def test_the_newest_signature_cannot_vanish_unnoticed(cast):
    signature = sign(cast.reviewer)
    tamper("DELETE FROM signing_signature WHERE id = %s", signature.pk)
    assert damages()[0].startswith(f"signature {signature.pk}: it was removed")


def test_the_form_asks_for_the_password_and_carries_the_hash():
    assert not SignatureForm({"content_hash": "x", "password": PASSWORD}).is_valid()
    assert not SignatureForm({"content_hash": CONTENT, "password": ""}).is_valid()
    assert SignatureForm({"content_hash": CONTENT, "password": PASSWORD}).is_valid()
    assert not SignatureForm({"content_hash": CONTENT, "password": PASSWORD}, confirm_label="I have seen it").is_valid()
