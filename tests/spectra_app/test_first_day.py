"""From an empty laboratory to a first examination, through pages alone."""

from __future__ import annotations

import re
from datetime import date

from django.core.files.uploadedfile import SimpleUploadedFile
from django.urls import reverse

from spectra.models import (
    Examination,
    GroupTable,
    Instrument,
    Material,
    MaterialVersion,
    MethodVersion,
    Procedure,
    Reference,
)
from spectra.services import receiving
from tests.builders import jcamp_file
from tests.cast import PASSWORD
from tests.spectra_app import test_instrument_pages, test_material_pages, test_procedure_pages, test_shelf_pages


def test_two_people_get_from_nothing_to_a_first_examination(cast, as_person):
    owner, approver = as_person(cast.method_owner), as_person(cast.qa_manager)

    def approve(kind, row):
        url = reverse("spectra:approve", args=[kind, row.pk])
        page = approver.get(url).content.decode()
        content_hash = re.search(r'name="content_hash" value="([0-9a-f]{64})"', page)[1]
        assert approver.post(url, {"content_hash": content_hash, "password": PASSWORD}).status_code == 302

    owner.post(reverse("spectra:load_method"))
    approve("method", MethodVersion.objects.get())
    owner.post(reverse("spectra:load_group_table"))
    approve("group_table", GroupTable.objects.get())

    class Lab:
        method = MethodVersion.objects.get()
        material = None

    film = {"technique": "transmission", "atr_crystal_index": "", "atr_angle_deg": "", "atr_reflections": ""}
    owner.post(reverse("spectra:new_procedure"), test_procedure_pages.sent(Lab, number="IR-01", **film))
    approve("procedure", Procedure.objects.get())
    owner.post(reverse("spectra:new_material"), test_material_pages.sent())
    approve("material", MaterialVersion.objects.get())
    Lab.material = MaterialVersion.objects.get()
    owner.post(reverse("spectra:new_reference"), test_shelf_pages.sent(Lab))
    approve("reference", Reference.objects.get())
    owner.post(reverse("spectra:new_instrument"), test_instrument_pages.sent())
    accessory = Instrument.objects.get().accessories.get()
    film_file = SimpleUploadedFile("film.dx", jcamp_file(title="film"))
    owner.post(reverse("spectra:new_check", args=[accessory.pk]), test_instrument_pages.check(film=film_file))

    assert Material.objects.get().references.get().state == "approved"
    receiving.register_delivery(
        by=cast.analyst,
        material_version_id=Lab.material.pk,
        supplier="Supplier North",
        lot="L-1",
        received_on=date(2026, 3, 2),
    )
    assert Examination.objects.get().procedure == Procedure.objects.get()
