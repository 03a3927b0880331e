"""The number of database queries of a page does not grow with the number of rows that it shows."""

from __future__ import annotations

from dataclasses import dataclass

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.urls import reverse

from spectra import computing, queue
from spectra.models import Delivery
from spectra.services import instruments, master
from tests import builders
from tests.cast import Cast, signed_in


@dataclass
class Growing:
    """A laboratory to which another helping of everything can be added."""

    cast: Cast
    lab: builders.Laboratory
    helpings: int = 0

    def grow(self) -> None:
        self.helpings += 1
        n, cast, lab = self.helpings, self.cast, self.lab
        delivery = builders.delivery(cast, lab, lot=f"files-{n}", containers_total=3, sampled_containers=(1, 2, 3))
        row = delivery.examinations.order_by("pk").first()
        builders.upload(row, cast.analyst, data=builders.jcamp_file(seed=n), file_name=f"waiting-{n}.dx")
        builders.upload(
            builders.examination(cast, lab, lot=f"ask-{n}"),
            cast.analyst,
            data=builders.table_file(seed=n),
            file_name=f"table-{n}.txt",
        )
        builders.examination(cast, lab, lot=f"empty-{n}")
        builders.drafted_version(cast, lab, lot=f"draft-{n}")
        builders.submitted_version(cast, lab, lot=f"submitted-{n}")
        builders.taken_version(cast, lab, lot=f"taken-{n}")
        builders.rejected_version(cast, lab, lot=f"rejected-{n}")
        builders.approved_version(cast, lab, lot=f"approved-{n}")
        material = builders.draft_material(cast, code=f"M-{n}", name=f"Material {n}")
        builders.approved("material", material, cast)
        builders.draft_material(cast, code=f"D-{n}", name=f"Draft {n}")
        builders.register_reference(cast, material, code=f"R-N{n}", seed=200 + n)
        builders.draft_procedure(cast, lab.method)
        master.draft_method(by=cast.method_owner, name=f"method {n}")
        instruments.register_instrument(
            by=cast.method_owner,
            code=f"FT-N{n}",
            name="Another instrument",
            accessories=[{"code": "a", "name": "cell", "technique": "transmission"}],
        )


@pytest.fixture
def growing(cast, monkeypatch) -> Growing:
    monkeypatch.setattr(computing, "compute", lambda analysis, *, progress=None: builders.fake_outcome())
    monkeypatch.setattr(queue, "ring", lambda analysis_id: None)
    made = Growing(cast, builders.laboratory(cast))
    made.grow()
    return made


def queries(growing: Growing, person: str, url: str) -> list[str]:
    client = signed_in(growing.cast[person])
    client.get(url)  # what is asked for once in a process is not counted
    with CaptureQueriesContext(connection) as context:
        response = client.get(url)
        assert response.status_code == 200
    return [query["sql"] for query in context.captured_queries]


LISTS = [
    ("analyst", "reviews:today"),
    ("reviewer", "reviews:today"),
    ("qa_manager", "reviews:today"),
    ("method_owner", "reviews:today"),
    ("administrator", "reviews:today"),
    ("analyst", "reviews:samples"),
    ("qa_manager", "trail:search"),
    ("analyst", "spectra:shelf"),
    ("analyst", "spectra:materials"),
    ("analyst", "spectra:procedures"),
    ("analyst", "spectra:methods"),
    ("analyst", "spectra:group_tables"),
    ("analyst", "spectra:watch_lists"),
    ("analyst", "spectra:instruments"),
    ("analyst", "reviews:register_delivery"),
    ("administrator", "accounts:people"),
]


def test_a_list_asks_the_database_as_often_for_many_rows_as_for_few(growing):
    few = {(who, name): queries(growing, who, reverse(name)) for who, name in LISTS}
    for _ in range(3):
        growing.grow()
    grown = {}
    for (who, name), before in few.items():
        after = queries(growing, who, reverse(name))
        if len(after) > len(before):
            grown[f"{name} for {who}"] = f"{len(before)} queries became {len(after)}: {repeated(after)}"
    assert not grown


def repeated(statements: list[str]) -> str:
    """The statement that is asked most often, shapes compared without their values."""
    shapes: dict[str, int] = {}
    for sql in statements:
        shape = " ".join("?" if word.strip("(),'").isdigit() else word for word in sql.split())
        shapes[shape] = shapes.get(shape, 0) + 1
    shape, count = max(shapes.items(), key=lambda item: item[1])
    return f"{count} times {shape[:300]}"


def test_a_delivery_asks_as_often_for_many_samples_as_for_few(growing):
    counts = []
    for containers in (2, 9):
        row = builders.delivery(
            growing.cast,
            growing.lab,
            lot=f"c-{containers}",
            containers_total=containers,
            sampled_containers=tuple(range(1, containers + 1)),
        )
        assert Delivery.objects.get(pk=row.pk).samples.count() == containers
        counts.append(len(queries(growing, "analyst", reverse("reviews:delivery", args=[row.pk]))))
    assert counts[0] == counts[1]


def test_a_sample_and_its_bench_ask_as_often_for_many_spectra_as_for_few(growing):
    counts = []
    for spectra in (2, 6):
        row = builders.examination(growing.cast, growing.lab, lot=f"s-{spectra}")
        decisive = builders.analysed_spectrum(growing.cast, row)
        for seed in range(1, spectra):
            builders.upload(
                row, growing.cast.analyst, data=builders.jcamp_file(seed=50 + seed), file_name=f"more-{seed}.dx"
            )
        sample = reverse("reviews:sample", args=[row.samples.get().pk])
        bench = reverse("reviews:bench", args=[decisive.pk])
        counts.append([len(queries(growing, "analyst", url)) for url in (sample, bench)])
    assert counts[0] == counts[1]


def test_a_bench_and_a_review_ask_as_often_for_many_claims_as_for_few(growing, monkeypatch):
    counts = []
    for groups in (4, 24):
        item = builders.RESULT["groups"][0]
        more = [{**item, "group": f"group_{n}", "label": f"Group {n}", "agrees": "no"} for n in range(groups)]
        result = builders.RESULT | {"groups": more}
        monkeypatch.setattr(
            computing, "compute", lambda analysis, *, progress=None, result=result: builders.fake_outcome(result)
        )
        draft = builders.drafted_version(growing.cast, growing.lab, lot=f"g-{groups}")
        assert draft.claims.count() >= groups
        bench = queries(growing, "analyst", reverse("reviews:bench", args=[draft.analysis.spectrum_id]))
        taken = builders.taken_version(growing.cast, growing.lab, lot=f"gt-{groups}")
        review = queries(growing, "reviewer", reverse("reviews:review", args=[taken.pk]))
        counts.append([len(bench), len(review)])
    assert counts[0] == counts[1]


def test_the_life_of_a_record_asks_as_often_for_many_entries_as_for_few(growing):
    few = builders.examination(growing.cast, growing.lab, lot="t-1")
    many = builders.approved_version(growing.cast, growing.lab, lot="t-2").interpretation.examination
    urls = [reverse("trail:record", args=["examination", row.pk]) for row in (few, many)]
    counts = [len(queries(growing, "qa_manager", url)) for url in urls]
    assert counts[0] == counts[1]
