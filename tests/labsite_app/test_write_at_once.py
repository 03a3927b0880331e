"""Several people write at the same moment: the chain has no gap, nobody waits for ever, nothing is lost."""

from __future__ import annotations

import threading

import pytest
from django.db import connection, transaction

from labsite.accounts import services as accounts
from labsite.accounts.models import Role, RoleGrant, User
from labsite.errors import NotPossible
from labsite.signing import services as signing
from labsite.signing.models import Meaning, Signature
from labsite.trail.events import Event, Subject
from labsite.trail.models import TrailEntry
from labsite.trail.record import record, unit_of_work
from labsite.trail.verify import verify
from tests.cast import PASSWORD, make_person, request_of

WRITERS, UNITS, WAIT_S = 4, 15, 60


def run_together(*works) -> list[BaseException]:
    """Run the functions in threads with a connection each; returns what they raised."""
    problems: list[BaseException] = []

    def run(work) -> None:
        try:
            work()
        except BaseException as problem:  # noqa: BLE001  (told to the thread that waits)
            problems.append(problem)
        finally:
            connection.close()

    threads = [threading.Thread(target=run, args=(work,)) for work in works]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(WAIT_S)
    assert not any(thread.is_alive() for thread in threads), "a writer waits for ever"
    return problems


@pytest.mark.django_db(transaction=True)
def test_concurrent_writers_give_a_chain_without_gaps():
    def write(writer: int) -> None:
        for number in range(UNITS):
            with unit_of_work():
                record(Event.SAMPLE_REGISTERED, by=None, subject=Subject("sample", f"{writer}-{number}", "S"))
                record(Event.SAMPLE_CHANGED, by=None, subject=Subject("sample", f"{writer}-{number}", "S"))

    assert run_together(*(lambda writer=writer: write(writer) for writer in range(WRITERS))) == []
    assert TrailEntry.objects.count() == WRITERS * UNITS * 2
    result = verify()
    assert result.ok, result.damages
    kept_together = TrailEntry.objects.order_by("seq").values_list("subject_id", flat=True)
    assert list(kept_together[::2]) == list(kept_together[1::2]), "entries of one unit stand together"


@pytest.mark.django_db(transaction=True)
def test_a_unit_that_fails_leaves_no_gap_for_the_others():
    def write(fails: bool) -> None:
        for number in range(UNITS):
            try:
                with unit_of_work():
                    record(Event.SAMPLE_REGISTERED, by=None, subject=Subject("sample", number, "S"))
                    if fails:
                        raise ValueError
            except ValueError:
                pass

    assert run_together(lambda: write(False), lambda: write(True)) == []
    assert TrailEntry.objects.count() == UNITS
    assert verify().ok


@pytest.mark.django_db(transaction=True)
def test_what_runs_on_commit_can_write_again():
    def again() -> None:
        with unit_of_work():
            record(Event.SAMPLE_CHANGED, by=None, subject=Subject("sample", 1, "S"))

    with unit_of_work():
        record(Event.SAMPLE_REGISTERED, by=None, subject=Subject("sample", 1, "S"))
        transaction.on_commit(again)
    assert list(TrailEntry.objects.order_by("seq").values_list("event", flat=True)) == [
        "sample.registered",
        "sample.changed",
    ]


@pytest.mark.django_db(transaction=True)
def test_a_unit_of_work_inside_somebody_elses_transaction_is_refused():
    with pytest.raises(RuntimeError), transaction.atomic(), unit_of_work():
        pass


@pytest.mark.django_db(transaction=True)
def test_two_administrators_who_remove_each_other_leave_one():
    first = make_person("first", roles=(Role.LAB_ADMINISTRATOR,))
    second = make_person("second", roles=(Role.LAB_ADMINISTRATOR,))
    assert first.roles == second.roles == {"lab_administrator"}  # read now: both were allowed when they began
    together = threading.Barrier(2, timeout=WAIT_S)

    def remove(by: User, whom: User) -> None:
        together.wait()
        accounts.revoke_role(by=by, user_id=whom.pk, role=Role.LAB_ADMINISTRATOR, reason="no longer needed")

    (problem,) = run_together(lambda: remove(first, second), lambda: remove(second, first))
    assert isinstance(problem, NotPossible) and problem.code == "accounts.last_administrator"
    assert RoleGrant.objects.filter(role=Role.LAB_ADMINISTRATOR, revoked_at=None).count() == 1


@pytest.mark.django_db(transaction=True)
def test_one_proof_used_twice_at_once_signs_once():
    person = make_person("reviewer", roles=(Role.REVIEWER,))
    proof = signing.prove(request_of(person), password=PASSWORD)
    together = threading.Barrier(2, timeout=WAIT_S)

    def sign() -> None:
        together.wait()
        with unit_of_work():
            signing.sign(
                proof=proof, by=person, kind="document", subject_id=1, content_hash="ab" * 32, meaning=Meaning.REVIEWED
            )

    (problem,) = run_together(sign, sign)
    assert isinstance(problem, NotPossible) and problem.code == "signing.proof_used"
    assert Signature.objects.count() == 1
