"""What a submission signs: all that the decision stands on, as canonical bytes. One place builds it, one hash names it.

Numbers are written as text, people as account numbers (their names stay with their signatures), so that the bytes are
the same on every machine and a lawful erasure leaves them whole.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence

import rfc8785

from reviews.models import Claim, InterpretationVersion, MustSeePoint
from reviews.points import DraftPoint
from spectra import selectors as spectra_selectors

FORMAT = 1


def plain(value: object) -> object:
    """JSON types with every fractional number as its shortest text."""
    if isinstance(value, bool) or value is None or isinstance(value, int | str):
        return value
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return str(value)


def content_of(version: InterpretationVersion, points: Sequence[DraftPoint]) -> dict[str, object]:
    """The document that is signed. Reads rows, writes none."""
    examination = version.interpretation.examination
    delivery = examination.delivery
    material = delivery.material_version
    procedure = examination.procedure
    analysis = version.analysis
    reference = analysis.reference
    return plain(
        {
            "format": FORMAT,
            "kind": "interpretation",
            "examination": examination.code,
            "version": version.number,
            "revises": version.revises.number if version.revises else None,
            "samples": [sample.code for sample in examination.samples.order_by("pk")],
            "delivery": {
                "code": delivery.code,
                "lot": delivery.lot,
                "supplier": delivery.supplier,
                "received_on": delivery.received_on.isoformat(),
            },
            "material": {
                "code": material.material.code,
                "version": material.number,
                "declared": material.name,
                "content_hash": material.content_hash,
            },
            "procedure": {
                "number": procedure.number,
                "edition": procedure.edition,
                "content_hash": procedure.content_hash,
            },
            "spectra": [
                {
                    "file": spectrum.upload.file_name,
                    "sha256": spectrum.upload.raw_file.sha256,
                    "block": spectrum.block_index,
                    "arrays_sha256": spectrum.arrays_sha256,
                    "answers": spectrum.upload.answers,
                    "role": spectrum.role,
                    "excluded_reason": spectrum.excluded_reason,
                    "technique": spectrum.technique,
                    "accessory": str(spectrum.accessory) if spectrum.accessory else "",
                    "resolution_cm1": spectrum.resolution_cm1,
                    "already_processed": spectrum.already_processed,
                    "prepared_by": spectrum.prepared_by_id,
                    "measured_by": spectrum.measured_by_id,
                    "measured_at": spectrum.measured_at_text,
                }
                for spectrum in spectra_selectors.spectra_of(examination)
            ],
            "refused_files": [
                {"file": upload.file_name, "sha256": upload.raw_file.sha256, "problem": upload.problem_code}
                for upload in spectra_selectors.unread_uploads(examination)
            ],
            "analysis": {
                "id": analysis.pk,
                "result_digest": analysis.result_digest,
                "curves_sha256": analysis.curves_sha256,
                "core_version": analysis.core_version,
                "method": {"number": analysis.method.number, "digest": analysis.method.digest},
                "group_table": {"number": analysis.group_table.number, "digest": analysis.group_table.digest},
                "reference": {
                    "code": reference.code,
                    "sha256": reference.raw_file.sha256,
                    "content_hash": reference.content_hash,
                }
                if reference
                else None,
                "watch_list": str(analysis.watch_list) if analysis.watch_list else "",
            },
            "claims": [claim_content(claim) for claim in version.claims.all()],
            "points": [point_content(point) for point in points],
            "conclusion": version.conclusion,
            "conclusion_text": version.conclusion_text,
            "contributors": sorted(set(examination.contributions.values_list("user_id", flat=True))),
        }
    )


def claim_content(claim: Claim) -> dict[str, object]:
    """One claim as it is signed; verification compares the row with it again."""
    return plain(
        {
            "key": claim.key,
            "kind": claim.kind,
            "subject": claim.subject,
            "title": claim.title,
            "computed": {
                "verdict": claim.computed_verdict,
                "agrees": claim.computed_agrees,
                "text": claim.computed_text,
                "evidence": claim.evidence,
            },
            "must_see": claim.must_see,
            "verdict": claim.verdict,
            "agrees": claim.agrees,
            "status": claim.status,
            "reason": claim.reason,
            "stated_by": claim.stated_by_id,
        }
    )


def point_content(point: DraftPoint | MustSeePoint) -> dict[str, object]:
    """One must-see point as it is signed, from its draft or from its frozen row."""
    return {
        "key": point.key,
        "kind": point.kind,
        "title": point.title,
        "detail": point.detail,
        "comment_required": point.comment_required,
    }


def canonical(document: dict[str, object]) -> bytes:
    return rfc8785.dumps(document)


def hash_of(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()
