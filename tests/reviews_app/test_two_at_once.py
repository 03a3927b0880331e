"""Two people press at the same moment: exactly one of them is first. Needs a database that two connections share."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable

import pytest
from django.db import connection, connections

from labsite.accounts.models import User
from labsite.errors import DomainError
from labsite.trail.verify import verify
from reviews.models import Decision, InterpretationVersion
from reviews.services import drafts, reviewing
from spectra.models import Analysis, Spectrum
from spectra.services import analyses
from tests import builders
from tests.cast import make_person

pytestmark = pytest.mark.django_db(transaction=True)


def at_once(*acts: Callable[[], object]) -> list[object]:
    """Run each act in a thread with a connection of its own; give back what each returned or the refusal it met."""
    barrier, outcomes = threading.Barrier(len(acts), timeout=20), [None] * len(acts)

    def run(number: int) -> None:
        try:
            barrier.wait()
            outcomes[number] = acts[number]()
        except DomainError as refused:
            outcomes[number] = refused
        finally:
            connections.close_all()

    threads = [threading.Thread(target=run, args=(number,), daemon=True) for number in range(len(acts))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=40)
        assert not thread.is_alive()
    assert None not in outcomes
    return outcomes


def own_copy(person: User) -> User:
    return User.objects.get(pk=person.pk)


def split(outcomes):
    refused = [outcome for outcome in outcomes if isinstance(outcome, DomainError)]
    return [outcome for outcome in outcomes if outcome not in refused], refused


@pytest.fixture
def reviewers(cast):
    return [cast.reviewer, make_person("other_reviewer", roles=("reviewer",))]


def test_two_reviewers_take_one_proposal_and_one_has_it(cast, lab, quick_computing, reviewers):
    version = builders.submitted_version(cast, lab)
    done, refused = split(
        at_once(*(lambda r=r: reviewing.take(version_id=version.pk, by=own_copy(r)) for r in reviewers))
    )
    assert len(done) == len(refused) == 1 and refused[0].status == 409
    assert InterpretationVersion.objects.get(pk=version.pk).taken_by == done[0].taken_by


def test_two_decisions_on_one_version_and_one_holds(cast, lab, quick_computing):
    for round_number in range(3):
        version = builders.taken_version(cast, lab, lot=f"L-{round_number}")
        builders.see_everything(version, cast.reviewer)
        proofs = [builders.proof_of(cast.reviewer) for _ in range(2)]
        done, refused = split(
            at_once(
                lambda v=version, p=proofs[0]: reviewing.approve(
                    version_id=v.pk, by=own_copy(cast.reviewer), proof=p, content_hash=v.content_hash
                ),
                lambda v=version, p=proofs[1]: reviewing.reject(
                    version_id=v.pk,
                    by=own_copy(cast.reviewer),
                    proof=p,
                    content_hash=v.content_hash,
                    reasons=[{"text": "no"}],
                ),
            )
        )
        assert len(done) == len(refused) == 1 and refused[0].status == 409
        decision = Decision.objects.get(version=version)
        assert InterpretationVersion.objects.get(pk=version.pk).state == decision.verdict
    result = verify()
    assert result.ok, result.damages


def test_a_double_click_on_submit_signs_once(cast, lab, quick_computing):
    version = builders.drafted_version(cast, lab)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    shown = builders.hash_to_sign(version)
    proofs = [builders.proof_of(cast.analyst) for _ in range(2)]
    done, refused = split(
        at_once(
            *(
                lambda p=p: drafts.submit(version_id=version.pk, by=own_copy(cast.analyst), proof=p, content_hash=shown)
                for p in proofs
            )
        )
    )
    assert len(done) == len(refused) == 1 and refused[0].status == 409


def test_a_file_and_a_submission_at_once_leave_nothing_unsigned(cast, lab, quick_computing):
    for round_number in range(3):
        version = builders.drafted_version(cast, lab, lot=f"L-{round_number}")
        builders.confirm_all(version, cast.analyst)
        builders.conclude(version, cast.analyst)
        row, proof, shown = (
            version.interpretation.examination,
            builders.proof_of(cast.analyst),
            builders.hash_to_sign(version),
        )
        done, refused = split(
            at_once(
                lambda v=version, p=proof, s=shown: drafts.submit(
                    version_id=v.pk, by=own_copy(cast.analyst), proof=p, content_hash=s
                ),
                lambda r=row: builders.upload(r, own_copy(cast.second_analyst), data=builders.jcamp_file(seed=9)),
            )
        )
        assert len(done) == len(refused) == 1 and refused[0].status == 409
        submitted = InterpretationVersion.objects.get(pk=version.pk).state == "submitted"
        assert Spectrum.objects.filter(examination=row).count() == (1 if submitted else 2)


def test_an_edit_and_a_submission_at_once_never_wait_for_each_other(cast, lab, quick_computing, monkeypatch):
    """The edit holds the version and goes on to note whose work it is, which needs the examination."""
    version = builders.drafted_version(cast, lab)
    builders.confirm_all(version, cast.analyst)
    builders.conclude(version, cast.analyst)
    proof, shown, claim = (
        builders.proof_of(cast.analyst),
        builders.hash_to_sign(version),
        version.claims.get(key="group:ester"),
    )
    edit_is_under_way, note = threading.Event(), drafts.contribute

    def slowly(*, examination, user, kind):
        if user.pk == cast.second_analyst.pk:
            edit_is_under_way.set()
            time.sleep(0.5)  # the submission gets as far as it can
        note(examination=examination, user=user, kind=kind)

    def submit_meanwhile():
        assert edit_is_under_way.wait(20)
        return drafts.submit(version_id=version.pk, by=own_copy(cast.analyst), proof=proof, content_hash=shown)

    monkeypatch.setattr(drafts, "contribute", slowly)
    done, refused = split(
        at_once(
            lambda: drafts.change_claim(
                version_id=version.pk,
                claim_id=claim.pk,
                by=own_copy(cast.second_analyst),
                verdict="undecided",
                reason="I see it otherwise.",
                edits=None,
            ),
            submit_meanwhile,
        )
    )
    assert len(done) == len(refused) == 1 and refused[0].status == 409, refused
    assert InterpretationVersion.objects.get(pk=version.pk).state == "draft"


def test_an_analysis_that_ends_and_a_submission_at_once_never_wait_for_each_other(cast, lab, quick_computing):
    for round_number in range(3):
        version = builders.drafted_version(cast, lab, lot=f"L-{round_number}")
        builders.confirm_all(version, cast.analyst)
        builders.conclude(version, cast.analyst)
        row = version.interpretation.examination
        replicate = builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=9)).spectra.get()
        waiting, proof = replicate.analyses.get(), builders.proof_of(cast.analyst)
        shown = builders.hash_to_sign(version)
        done, refused = split(
            at_once(
                lambda v=version, p=proof, s=shown: drafts.submit(
                    version_id=v.pk, by=own_copy(cast.analyst), proof=p, content_hash=s
                ),
                lambda w=waiting: analyses.execute(analysis_id=w.pk),
            )
        )
        assert len(done) == 2 and not refused
    result = verify()
    assert result.ok, result.damages


def test_two_workers_claim_one_analysis_and_one_does_it(cast, lab, quick_computing, rung):
    analysis = builders.waiting_analysis(cast, lab)
    outcomes = at_once(*[lambda: analyses.execute(analysis_id=analysis.pk)] * 3)
    assert sorted(outcomes) == [False, False, True]
    assert Analysis.objects.get(pk=analysis.pk).attempt == 1


def test_two_deliveries_at_once_get_two_numbers(cast, lab):
    outcomes = at_once(*(lambda n=n: builders.delivery(cast, lab, lot=f"L-{n}") for n in range(4)))
    assert len({row.code for row in outcomes}) == 4


def test_this_file_says_which_database_it_ran_on():
    assert connection.vendor in ("sqlite", "postgresql")
