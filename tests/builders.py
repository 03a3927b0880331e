"""Small builders through the real services: what a laboratory needs before the thing that a test is about."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import rfc8785
from django.conf import settings
from django.utils import timezone

from labsite.accounts.models import User
from labsite.signing.services import SigningProof, prove
from reviews.models import InterpretationVersion
from reviews.services import drafts, reviewing
from spectra import arrays, computing
from spectra.core.version import CORE_VERSION
from spectra.models import (
    Analysis,
    Delivery,
    Examination,
    GroupTable,
    Instrument,
    MaterialVersion,
    MethodVersion,
    Procedure,
    Reference,
    Spectrum,
    Upload,
)
from spectra.services import analyses, approvals, instruments, master, receiving, uploads
from spectra.services.uploads import MeasurementFacts
from tests.cast import PASSWORD, Cast, request_of

TABLE_FILE = Path(settings.BASE_DIR) / "fixtures" / "group_table" / "version_1.toml"
ESTER_BANDS = (
    (2958.0, 0.55, 30.0),
    (1742.0, 0.9, 16.0),
    (1462.0, 0.25, 22.0),
    (1240.0, 0.8, 30.0),
    (1040.0, 0.5, 24.0),
)


def proof_of(person: User) -> SigningProof:
    """The person types their password now."""
    return prove(request_of(person), password=PASSWORD)


# Files.


def spectrum_values(
    bands: Sequence[tuple[float, float, float]] = ESTER_BANDS, *, seed: int = 1, noise: float = 2e-4
) -> tuple[np.ndarray, np.ndarray]:
    """Wavenumbers (cm-1, rising) and absorbance of Gaussian bands (position, height, full width) with some noise."""
    x_cm1 = np.arange(650.0, 4001.0, 2.0)
    absorbance = 0.02 + noise * np.random.default_rng(seed).standard_normal(len(x_cm1))
    for position, height, width in bands:
        absorbance += height * np.exp(-4 * np.log(2) * ((x_cm1 - position) / width) ** 2)
    return x_cm1, absorbance


def jcamp_file(
    *,
    title: str = "ester film",
    seed: int = 1,
    bands: Sequence[tuple[float, float, float]] = ESTER_BANDS,
    y_units: str = "ABSORBANCE",
    headers: Mapping[str, str] | None = None,
) -> bytes:
    """One JCAMP-DX 4.24 file, AFFN, of generated bands."""
    x_cm1, absorbance = spectrum_values(bands, seed=seed)
    raw = np.rint(absorbance / 1e-5).astype(int)
    lines = [
        f"##TITLE={title}",
        "##JCAMP-DX=4.24",
        "##DATA TYPE=INFRARED SPECTRUM",
        "##ORIGIN=generated",
        "##OWNER=public domain",
        *(f"##{label}={text}" for label, text in (headers or {}).items()),
        "##XUNITS=1/CM",
        f"##YUNITS={y_units}",
        f"##FIRSTX={x_cm1[0]:g}",
        f"##LASTX={x_cm1[-1]:g}",
        "##DELTAX=2",
        "##XFACTOR=1",
        "##YFACTOR=0.00001",
        f"##NPOINTS={len(x_cm1)}",
        f"##FIRSTY={raw[0] * 1e-5:.5f}",
        "##XYDATA=(X++(Y..Y))",
    ]
    for start in range(0, len(raw), 8):
        lines.append(f"{x_cm1[start]:g} " + " ".join(str(value) for value in raw[start : start + 8]))
    return ("\n".join([*lines, "##END="]) + "\n").encode("utf-8")


def table_file(*, seed: int = 1) -> bytes:
    """Two columns without a header: wavenumber, and an ordinate that the file does not name."""
    x_cm1, absorbance = spectrum_values(seed=seed)
    return "".join(f"{x:.1f}\t{y:.5f}\n" for x, y in zip(x_cm1, absorbance, strict=True)).encode("ascii")


# Master data.


@dataclass(frozen=True)
class Laboratory:
    """Approved master data, enough to receive and examine one material."""

    method: MethodVersion
    table: GroupTable
    procedure: Procedure
    material: MaterialVersion
    reference: Reference
    instrument: Instrument


def approved(kind: str, row, cast: Cast):
    """Approved by the QA manager."""
    return approvals.approve(
        kind=kind,
        pk=row.pk,
        by=cast.qa_manager,
        proof=proof_of(cast.qa_manager),
        content_hash=approvals.content_hash_of(type(row).objects.get(pk=row.pk)),
    )


def draft_procedure(cast: Cast, method: MethodVersion, **values: object) -> Procedure:
    fields = {
        "title": "Identity by infrared, liquid film",
        "effective_from": date(2026, 1, 1),
        "technique": "transmission",
        "preparation": "A drop between two windows.",
        "low_cm1": 650.0,
        "high_cm1": 4000.0,
        "resolution_cm1": 4.0,
        "scans": 16,
        "method_id": method.pk,
    } | values
    return master.draft_procedure(by=cast.method_owner, number="IR-01", values=fields)


def draft_material(cast: Cast, *, code: str = "EAC", **values: object) -> MaterialVersion:
    fields = {
        "name": "Ethyl acetate",
        "formula": "C4H8O2",
        "smiles": "CCOC(C)=O",
        "phase": "liquid",
        "procedure_number": "IR-01",
    } | values
    return master.draft_material(by=cast.method_owner, code=code, values=fields)


def register_reference(cast: Cast, material: MaterialVersion | None, *, code: str = "R-1", seed: int = 90) -> Reference:
    return master.register_reference(
        by=cast.method_owner,
        code=code,
        name="Ethyl acetate standard",
        material_id=material.material_id if material else None,
        file_name="reference.dx",
        data=jcamp_file(title="standard", seed=seed),
        values={
            "standard_lot": "STD-1",
            "technique": "transmission",
            "phase": "liquid",
            "spectrum_valid_until": date(2099, 1, 1),
        },
    )


def laboratory(cast: Cast, **material_values: object) -> Laboratory:
    """A laboratory that is ready for its first delivery, its instrument checked."""
    method = approved("method", master.draft_method(by=cast.method_owner, name="first"), cast)
    text = TABLE_FILE.read_text(encoding="utf-8")
    table = approved("group_table", master.load_group_table(by=cast.method_owner, text=text), cast)
    procedure = approved("procedure", draft_procedure(cast, method), cast)
    material = approved("material", draft_material(cast, **material_values), cast)
    reference = approved("reference", register_reference(cast, material), cast)
    instrument = instruments.register_instrument(
        by=cast.method_owner,
        code="FT-1",
        name="Bench instrument",
        accessories=[{"code": "film", "name": "cell holder", "technique": "transmission"}],
    )
    instruments.record_check(
        by=cast.method_owner,
        accessory_id=instrument.accessories.get().pk,
        performed_at=timezone.now() - timedelta(hours=1),
        valid_until=timezone.now() + timedelta(days=1),
        verdict="passed",
    )
    return Laboratory(method, table, procedure, material, reference, instrument)


# The way of one sample.


def delivery(cast: Cast, lab: Laboratory, **values: object) -> Delivery:
    fields = {"supplier": "Supplier North", "lot": "L-1", "received_on": date(2026, 3, 2)} | values
    return receiving.register_delivery(by=cast.analyst, material_version_id=lab.material.pk, **fields)


def examination(cast: Cast, lab: Laboratory, **values: object) -> Examination:
    return delivery(cast, lab, **values).examinations.get()


def upload(
    row: Examination, by: User, *, data: bytes | None = None, file_name: str = "film.dx", **facts: object
) -> Upload:
    return uploads.bring_file(
        examination_id=row.pk,
        by=by,
        file_name=file_name,
        data=jcamp_file() if data is None else data,
        facts=MeasurementFacts(**facts),
    )


def waiting_analysis(cast: Cast, lab: Laboratory) -> Analysis:
    """An uploaded spectrum whose analysis waits for a worker."""
    return upload(examination(cast, lab), cast.analyst).spectra.get().analyses.get()


RESULT: dict[str, object] = {
    "findings": [],
    "bands": [
        {"position_cm1": 1742.0, "height_absorbance": 0.9, "snr": 4000.0, "kind": "maximum"},
        {"position_cm1": 1240.0, "height_absorbance": 0.8, "snr": 3500.0, "kind": "maximum"},
    ],
    "structure": {"expected_groups": ["ester", "alkane_ch"]},
    "declared": {"expected_groups": ["ester", "alkane_ch"], "forbidden_groups": ["alcohol"]},
    "groups": [
        {
            "group": "ester",
            "label": "Ester",
            "verdict": "supported",
            "agrees": "yes",
            "for": ["C=O at 1742 cm⁻¹"],
            "against": [],
            "would_decide": [],
            "probability": 0.98,
            "weight": "strong",
        },
        {
            "group": "alkane_ch",
            "label": "Alkyl C-H",
            "verdict": "undecided",
            "agrees": "neutral",
            "for": [],
            "against": [],
            "would_decide": ["proton NMR"],
            "probability": 0.5,
            "weight": "weak",
        },
        {"group": "alcohol", "label": "Alcohol", "verdict": "contradicted", "agrees": "yes", "for": [], "against": []},
        {"group": "amine", "label": "Amine", "verdict": "undecided", "agrees": "neutral", "for": [], "against": []},
    ],
    "identity": {
        "verdict": "consistent",
        "agrees": "yes",
        "reference": "R-1",
        "for": ["5 of 5 bands of the reference are present"],
        "against": [],
        "bands_compared": 5,
    },
}


def fake_outcome(result: Mapping[str, object] = RESULT) -> computing.Outcome:
    """What an analysis would hand over, without one."""
    data = rfc8785.dumps(dict(result))
    return computing.Outcome(
        result=dict(result),
        result_bytes=data,
        digest=hashlib.sha256(data).hexdigest(),
        curves=arrays.pack_curves({"x_cm1": np.arange(4.0), "absorbance": np.zeros(4)}),
        core_version=CORE_VERSION,
        environment={"python": "3"},
    )


def analysed_spectrum(cast: Cast, row: Examination, *, by: User | None = None, **facts: object) -> Spectrum:
    """A spectrum whose analysis is done. Without the fixture `quick_computing` it is a real one."""
    spectrum = upload(row, by or cast.analyst, **facts).spectra.get()
    assert analyses.execute(analysis_id=spectrum.analyses.get().pk)
    return spectrum


def version_of(row: Examination) -> InterpretationVersion:
    return row.interpretation.versions.order_by("-number").first()


def drafted_version(cast: Cast, lab: Laboratory, **values: object) -> InterpretationVersion:
    row = examination(cast, lab, **values)
    analysed_spectrum(cast, row)
    return version_of(row)


def confirm_all(version: InterpretationVersion, by: User) -> None:
    for claim in version.claims.filter(status="proposed"):
        drafts.confirm_claim(version_id=version.pk, claim_id=claim.pk, by=by)


def conclude(version: InterpretationVersion, by: User, *, conclusion: str = "complies", text: str = "") -> None:
    drafts.write_conclusion(version_id=version.pk, by=by, conclusion=conclusion, text=text, edits=None)


def hash_to_sign(version: InterpretationVersion) -> str:
    return drafts.preview(InterpretationVersion.objects.get(pk=version.pk))[2]


def submit(version: InterpretationVersion, by: User) -> InterpretationVersion:
    return drafts.submit(version_id=version.pk, by=by, proof=proof_of(by), content_hash=hash_to_sign(version))


def submitted_version(cast: Cast, lab: Laboratory, **values: object) -> InterpretationVersion:
    version = drafted_version(cast, lab, **values)
    confirm_all(version, cast.analyst)
    conclude(version, cast.analyst)
    return submit(version, cast.analyst)


def see_everything(version: InterpretationVersion, by: User) -> None:
    """Open every point and agree with it."""
    for point in version.points.all():
        reviewing.open_point(version_id=version.pk, point_id=point.pk, by=by)
        reviewing.judge_point(version_id=version.pk, point_id=point.pk, by=by, judgement="agree", comment="seen")


def taken_version(cast: Cast, lab: Laboratory, **values: object) -> InterpretationVersion:
    version = submitted_version(cast, lab, **values)
    return reviewing.take(version_id=version.pk, by=cast.reviewer)


def approved_version(cast: Cast, lab: Laboratory, **values: object) -> InterpretationVersion:
    version = taken_version(cast, lab, **values)
    see_everything(version, cast.reviewer)
    reviewing.approve(
        version_id=version.pk,
        by=cast.reviewer,
        proof=proof_of(cast.reviewer),
        content_hash=version.content_hash,
    )
    return InterpretationVersion.objects.get(pk=version.pk)


def rejected_version(cast: Cast, lab: Laboratory, **values: object) -> InterpretationVersion:
    version = taken_version(cast, lab, **values)
    reviewing.reject(
        version_id=version.pk,
        by=cast.reviewer,
        proof=proof_of(cast.reviewer),
        content_hash=version.content_hash,
        reasons=[{"point": "conclusion", "text": "The replicate is missing."}],
    )
    return InterpretationVersion.objects.get(pk=version.pk)
