"""What arrives is registered with its containers, samples and examinations, or refused at the field that is wrong."""

from __future__ import annotations

from datetime import UTC, date, datetime

import pytest
from django.utils import timezone

from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible
from labsite.trail.models import TrailEntry
from spectra import selectors
from spectra.models import Container, Delivery, Examination, Sample
from spectra.services import receiving
from tests import builders


def register(cast, lab, **values):
    return builders.delivery(cast, lab, **values)


def test_each_sampled_container_gets_a_sample_and_an_examination(cast, lab):
    delivery = register(cast, lab, containers_total=4, sampled_containers=[2, 4, 2])
    assert delivery.containers.count() == 4 and delivery.containers_sampled == 2
    assert [list(s.containers.values_list("number", flat=True)) for s in delivery.samples.order_by("pk")] == [[2], [4]]
    assert delivery.examinations.count() == 2
    assert {row.procedure for row in delivery.examinations.all()} == {lab.procedure}


def test_a_composite_sample_stands_for_all_its_containers(cast, lab):
    delivery = register(cast, lab, containers_total=3, sampled_containers=[1, 2, 3], composite=True)
    sample = delivery.samples.get()
    assert sample.kind == "composite" and sample.containers.count() == 3
    assert sample.examinations.count() == 1


def test_numbers_follow_each_other_and_name_the_year(cast, lab):
    year = timezone.now().year
    codes = [register(cast, lab, lot=f"L-{n}").code for n in range(3)]
    assert codes == [f"D-{year}-{n:04d}" for n in (1, 2, 3)]
    assert Sample.objects.order_by("pk").last().code == f"S-{year}-0003"


def test_everything_registered_stands_in_the_trail(cast, lab):
    register(cast, lab)
    events = list(TrailEntry.objects.order_by("-seq").values_list("event", flat=True)[:3])
    assert events == ["examination.opened", "sample.registered", "delivery.registered"]


@pytest.mark.parametrize(
    ("values", "code", "field"),
    [
        ({"supplier": "  "}, "delivery.no_supplier", "supplier"),
        ({"lot": ""}, "delivery.no_lot", "lot"),
        ({"lot": "x" * 81}, "delivery.too_long", "lot"),
        ({"received_on": date(2999, 1, 1)}, "delivery.received_later", "received_on"),
        ({"due_on": date(2026, 3, 1)}, "delivery.due_before_receipt", "due_on"),
        ({"priority": 7}, "delivery.priority", "priority"),
        ({"containers_total": 0}, "delivery.containers", "containers_total"),
        ({"containers_total": 501}, "delivery.containers", "containers_total"),
        ({"sampled_containers": []}, "delivery.sampled_containers", "sampled_containers"),
        ({"sampled_containers": [2]}, "delivery.sampled_containers", "sampled_containers"),
        ({"sampled_containers": [0]}, "delivery.sampled_containers", "sampled_containers"),
    ],
)
def test_a_wrong_value_is_refused_at_its_field_and_nothing_is_kept(cast, lab, values, code, field):
    with pytest.raises(BadInput) as refused:
        register(cast, lab, **values)
    assert (refused.value.code, refused.value.params["field"]) == (code, field)
    assert not Delivery.objects.exists() and not Container.objects.exists()


def test_the_day_of_receipt_is_the_laboratorys_own_day(cast, lab, monkeypatch, settings):
    settings.LABORATORY_TIME_ZONE = "Pacific/Auckland"
    monkeypatch.setattr(timezone, "now", lambda: datetime(2026, 6, 1, 20, 0, tzinfo=UTC))
    assert register(cast, lab, received_on=date(2026, 6, 2)).received_on == date(2026, 6, 2)
    with pytest.raises(BadInput):
        register(cast, lab, received_on=date(2026, 6, 3))


def test_only_an_analyst_registers(cast, lab):
    for person in (cast.reviewer, cast.qa_manager, cast.method_owner, cast.administrator, cast.outsider):
        with pytest.raises(NotAllowed):
            receiving.register_delivery(
                by=person, material_version_id=lab.material.pk, supplier="S", lot="L", received_on=date(2026, 3, 2)
            )


def test_nothing_is_received_against_a_material_that_is_not_approved(cast, lab):
    draft = builders.draft_material(cast, code="OTHER")
    with pytest.raises(NotPossible) as refused:
        receiving.register_delivery(
            by=cast.analyst, material_version_id=draft.pk, supplier="S", lot="L", received_on=date(2026, 3, 2)
        )
    assert refused.value.code == "material.not_approved"
    with pytest.raises(NotVisible):
        receiving.register_delivery(
            by=cast.analyst, material_version_id=0, supplier="S", lot="L", received_on=date(2026, 3, 2)
        )


def test_without_an_edition_in_force_nothing_is_opened(cast, lab):
    later = builders.approved("material", builders.draft_material(cast, code="X", procedure_number="IR-99"), cast)
    with pytest.raises(NotPossible) as refused:
        receiving.register_delivery(
            by=cast.analyst, material_version_id=later.pk, supplier="S", lot="L", received_on=date(2026, 3, 2)
        )
    assert refused.value.code == "procedure.none_effective"
    assert not Delivery.objects.exists() and not Examination.objects.exists()


def test_the_edition_in_force_on_the_day_governs(cast, lab):
    builders.approved("procedure", builders.draft_procedure(cast, lab.method, effective_from=date(2999, 1, 1)), cast)
    newest = builders.approved(
        "procedure", builders.draft_procedure(cast, lab.method, effective_from=date(2026, 2, 1)), cast
    )
    builders.draft_procedure(cast, lab.method, effective_from=date(2026, 2, 2))
    assert newest.edition == 3
    assert selectors.effective_procedure("IR-01", on=date(2026, 3, 1)) == newest
    assert selectors.effective_procedure("IR-01", on=date(2026, 1, 15)) == lab.procedure
    assert selectors.effective_procedure("IR-01", on=date(2025, 1, 1)) is None


def test_the_last_delivery_of_a_material_gives_the_defaults_of_the_next(cast, lab):
    register(cast, lab, lot="first")
    second = register(cast, lab, lot="second")
    assert selectors.last_delivery_of(lab.material) == second


def test_samples_are_found_by_lot_supplier_and_number(cast, lab):
    register(cast, lab, lot="NB-77", containers_total=2, sampled_containers=[1, 2])
    register(cast, lab, lot="QQ-12", supplier="Supplier Hill")
    assert len(selectors.find_samples(text="nb-77")) == 2
    assert len(selectors.find_samples(text="hill ethyl")) == 1
    newest = selectors.find_samples(limit=1)
    assert len(selectors.find_samples(before_pk=newest[0].pk)) == 2
