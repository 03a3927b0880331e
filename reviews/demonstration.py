"""The demonstration laboratory, loaded through the same services that people use. No time is faked: all happens now.

The data are invented (fixtures/demo) and the accounts' password is public, so nothing here may run in production.
"""

from __future__ import annotations

from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

from django.conf import settings
from django.http import HttpRequest
from django.utils import timezone

from fixtures.demo import files, masters, records, scenario
from labsite.accounts import services as accounts
from labsite.accounts.models import Role, User
from labsite.errors import NotPossible
from labsite.signing import services as signing
from labsite.trail.events import Event, Subject
from labsite.trail.models import TrailEntry
from labsite.trail.record import record, unit_of_work
from reviews import selectors
from reviews.models import InterpretationVersion
from reviews.services import drafts, reviewing
from spectra.models import Examination, Priority, Sample
from spectra.services import analyses, approvals, instruments, master, receiving, uploads

PASSWORD = "a quiet page of evidence"
PEOPLE: dict[str, tuple[str, str, tuple[str, ...]]] = {
    # key in the scenario: user name, printed name, roles
    "analyst_1": ("analyst", "First analyst", (Role.ANALYST,)),
    "analyst_2": ("analyst2", "Second analyst", (Role.ANALYST,)),
    "reviewer_1": ("reviewer", "First reviewer", (Role.REVIEWER,)),
    "reviewer_2": ("reviewer2", "Second reviewer", (Role.REVIEWER, Role.ANALYST)),
    "qa": ("qa", "Quality manager", (Role.QA_MANAGER,)),
    "owner": ("owner", "Method owner", (Role.METHOD_OWNER,)),
    "admin": ("admin", "Laboratory administrator", (Role.LAB_ADMINISTRATOR,)),
}
PRIORITIES = {"urgent": Priority.URGENT, "normal": Priority.NORMAL, "low": Priority.LOW}
GROUP_TABLE = Path(__file__).resolve().parent.parent / "fixtures" / "group_table" / "version_1.toml"

Say = Callable[[str], None]


def accounts_by_role() -> list[tuple[str, str]]:
    """(user name, roles in words) of every demonstration account."""
    return [(name, ", ".join(Role(role).label for role in roles)) for name, _, roles in PEOPLE.values()]


def is_loaded() -> bool:
    return TrailEntry.objects.filter(event=Event.DEMO_LOADED).exists()


def is_begun() -> bool:
    return User.objects.exists()


def load(*, say: Say) -> None:
    """Fill an empty database with the demonstration. `say` is told each step."""
    if not settings.DEMO:
        raise NotPossible(
            "demo.not_here",
            "The demonstration is loaded only into a database of its own.",
            remedy="Start with `python3 manage.py start`, or set BANDLEDGER_DEMO=1.",
        )
    if is_begun():
        raise NotPossible(
            "demo.not_empty",
            "This database holds accounts already, so a loading was interrupted.",
            remedy=f"Remove the folder {settings.DATA_DIR} and start again.",
        )
    say("people")
    people = {
        key: accounts.create_user_with_password(
            username=name, printed_name=printed, password=PASSWORD, roles=[str(role) for role in roles]
        )
        for key, (name, printed, roles) in PEOPLE.items()
    }
    say("spectra (generated)")
    data = files.build_files()
    laboratory = _Laboratory(people, data)
    say("instrument, procedures, references and materials")
    laboratory.master_data()
    for number, story in enumerate(scenario.STORIES, start=1):
        say(f"story {number} of {len(scenario.STORIES)}: {story.title}")
        laboratory.tell(story)
    with unit_of_work():
        record(Event.DEMO_LOADED, by=None, subject=Subject("laboratory", "demo", "demonstration"))


def _crystal() -> dict[str, object]:
    """The one crystal of the demonstration, on which its ATR references were measured too."""
    atr = next(a for i in masters.INSTRUMENTS for a in i.accessories if "atr" in a.serves)
    return {
        "atr_crystal_index": atr.atr_crystal_index,
        "atr_angle_deg": atr.atr_angle_deg,
        "atr_reflections": atr.atr_reflections,
    }


class _Laboratory:
    """The people and files of one loading, so that the steps need not pass them along."""

    def __init__(self, people: dict[str, User], data: dict[str, bytes]):
        self.people = people
        self.data = data
        self.today = timezone.now().date()
        self.samples: dict[tuple[str, tuple[int, ...]], Sample] = {}
        self.materials: dict[str, int] = {}  # code -> id of the version
        self.material_ids: dict[str, int] = {}

    def proof(self, person: User) -> signing.SigningProof:
        request = HttpRequest()
        request.META["REMOTE_ADDR"] = "127.0.0.1"
        request.user = person
        return signing.prove(request, password=PASSWORD)

    def approve(self, kind: str, row) -> None:
        approvals.approve(
            kind=kind,
            pk=row.pk,
            by=self.people["qa"],
            proof=self.proof(self.people["qa"]),
            content_hash=approvals.content_hash_of(row),
        )

    def master_data(self) -> None:
        owner = self.people["owner"]
        table = master.load_group_table(by=owner, text=GROUP_TABLE.read_text(encoding="utf-8"))
        self.approve("group_table", table)
        method = master.draft_method(by=owner, name="Identity by mid-infrared")
        self.approve("method", method)
        for instrument in masters.INSTRUMENTS:
            self._instrument(instrument)
        for item in masters.PROCEDURES:
            self._procedure(item, method.pk)
        codes = {item.code: item for item in masters.MATERIALS}
        self._draft_materials(codes)
        references = self._references()
        lists = {}
        for item in masters.WATCH_LISTS:
            row = master.draft_watch_list(
                by=owner,
                code=item.code,
                title=item.title,
                items=[(name, references[code]) for name, code in item.items],
            )
            self.approve("watch_list", row)
            lists[item.code] = row.pk
        for code, item in codes.items():
            version = master.change_material(
                pk=self.materials[code],
                by=owner,
                values={"watch_list_id": lists[item.watch_list]},
                reason="The watch list is approved now.",
            )
            self.approve("material", version)

    def _instrument(self, item: records.Instrument) -> None:
        owner = self.people["owner"]
        rows = [
            {
                "code": accessory.code if len(accessory.serves) == 1 else f"{accessory.code}-{technique}",
                "name": accessory.name if len(accessory.serves) == 1 else f"{accessory.name}, {technique}",
                "technique": technique,
                "atr_crystal_index": accessory.atr_crystal_index,
                "atr_angle_deg": accessory.atr_angle_deg,
                "atr_reflections": accessory.atr_reflections,
            }
            for accessory in item.accessories
            for technique in accessory.serves
        ]
        instrument = instruments.register_instrument(by=owner, code=item.code, name=item.name, accessories=rows)
        instruments.record_qualification(
            by=owner,
            instrument_id=instrument.pk,
            performed_on=self.today - timedelta(days=item.qualified_days_ago),
            due_on=self.today + timedelta(days=item.requalify_in_days),
            occasion="yearly qualification",
        )
        for check in item.checks:
            for accessory in instrument.accessories.filter(code__startswith=check.accessory):
                now = timezone.now()
                instruments.record_check(
                    by=self.people["analyst_1"],
                    accessory_id=accessory.pk,
                    performed_at=now,
                    valid_until=now + timedelta(days=check.valid_days),
                    verdict=check.expected,
                    note=check.note,
                    data=self.data[check.file],
                )

    def _procedure(self, item: records.Procedure, method_id: int) -> None:
        accessory = next(a for i in masters.INSTRUMENTS for a in i.accessories if a.code == item.accessory)
        values = {
            name: getattr(item, name)
            for name in (
                "title technique preparation accessory_text low_cm1 high_cm1 resolution_cm1 scans repeats"
                " missing_bands_allowed extra_bands_allowed size_order_required solid_state_repeat"
            ).split()
        }
        values |= {
            "effective_from": self.today,
            "atr_crystal_index": accessory.atr_crystal_index,
            "atr_angle_deg": accessory.atr_angle_deg,
            "atr_reflections": accessory.atr_reflections,
            "method_id": method_id,
        }
        for _edition in range(item.edition):
            self.approve(
                "procedure", master.draft_procedure(by=self.people["owner"], number=item.number, values=values)
            )

    def _draft_materials(self, codes: dict[str, records.Material]) -> None:
        for code, item in codes.items():
            version = master.draft_material(
                by=self.people["owner"],
                code=code,
                values={
                    "name": item.name,
                    "formula": item.formula,
                    "smiles": item.smiles,
                    "repeat_unit": item.repeat_unit,
                    "composition_note": item.composition_note,
                    "phase": item.phase,
                    "expected_groups": list(item.expected_groups),
                    "forbidden_groups": list(item.forbidden_groups),
                    "not_separable_from": list(item.not_separable_from),
                    "companion_tests": list(item.companion_tests),
                    "cautions": list(item.cautions),
                    "acceptance": item.acceptance,
                    "procedure_number": item.procedure,
                },
            )
            self.materials[code] = version.pk
            self.material_ids[code] = version.material_id

    def _references(self) -> dict[str, int]:
        found = {}
        for item in masters.REFERENCES:
            row = master.register_reference(
                by=self.people["owner"],
                code=item.code,
                name=item.name,
                material_id=self.material_ids[item.material] if item.material else None,
                file_name=item.file,
                data=self.data[item.file],
                values={
                    "standard_lot": item.standard_lot,
                    "standard_expires_on": self.today + timedelta(days=item.standard_expires_in_days),
                    "spectrum_valid_until": self.today + timedelta(days=item.spectrum_valid_days),
                    "technique": item.technique,
                    "phase": item.phase,
                    "resolution_cm1": item.resolution_cm1,
                    **(_crystal() if item.technique == "atr" else {}),
                },
            )
            self.approve("reference", row)
            found[item.code] = row.pk
        return found

    # Stories

    def tell(self, story: records.Story) -> None:
        sample = self._sample(story)
        examination = sample.examinations.get()
        analyst = self.people[story.analyst]
        for file in story.files:
            self._bring(examination, file, analyst)
        for version in story.versions:
            self._version(examination, version, analyst)

    def _sample(self, story: records.Story) -> Sample:
        """The story's sample; a delivery is registered once, with a sample for each story that draws on it."""
        key = (story.lot, story.containers)
        if key not in self.samples:
            delivery = next(item for item in scenario.DELIVERIES if item.lot == story.lot)
            told = [other.containers for other in scenario.STORIES if other.lot == story.lot]
            composite = story.kind == "composite"
            numbers = story.containers if composite else tuple(number for group in told for number in group)
            row = receiving.register_delivery(
                by=self.people[story.analyst],
                material_version_id=self.materials[delivery.material],
                supplier=delivery.supplier,
                lot=delivery.lot,
                received_on=self.today - timedelta(days=delivery.received_days_ago),
                due_on=self.today + timedelta(days=delivery.due_in_days),
                priority=PRIORITIES[delivery.priority],
                containers_total=delivery.containers,
                sampled_containers=numbers,
                composite=composite,
                form=story.form,
                sampling_note=delivery.sampling_note,
            )
            for sample in row.samples.prefetch_related("containers"):
                self.samples[(story.lot, tuple(c.number for c in sample.containers.all()))] = sample
        return self.samples[key]

    def _bring(self, examination: Examination, file: records.File, analyst: User) -> None:
        role = "decisive" if file.excluded else file.role
        upload = uploads.bring_file(
            examination_id=examination.pk,
            by=analyst,
            file_name=file.name,
            data=self.data[file.name],
            facts=uploads.MeasurementFacts(role=role),
        )
        spectrum = upload.spectra.get()
        self._analyse(spectrum)
        if file.excluded:
            uploads.change_role(spectrum_id=spectrum.pk, by=analyst, role="excluded", reason=file.excluded)

    def _analyse(self, spectrum) -> None:
        for analysis in spectrum.analyses.filter(state="queued"):
            analyses.execute(analysis_id=analysis.pk)

    def _version(self, examination: Examination, told: records.Version, analyst: User) -> None:
        row = selectors.latest_version(examination)
        if row.state == "rejected":
            row = drafts.revise(
                version_id=row.pk, by=analyst, reason="; ".join(reason["text"] for reason in row.decision.reasons)
            )
        if not told.conclusion:
            return
        self._claims(row, told, analyst)
        drafts.write_conclusion(version_id=row.pk, by=analyst, conclusion=told.conclusion, text=told.text, edits=None)
        if not told.submitted:
            return
        fresh = selectors.version(row.pk)
        _points, _document, content_hash = drafts.preview(fresh)
        drafts.submit(version_id=row.pk, by=analyst, proof=self.proof(analyst), content_hash=content_hash)
        if told.review:
            self._review(selectors.version(row.pk), told.review)

    def _claims(self, row: InterpretationVersion, told: records.Version, analyst: User) -> None:
        changes = {(change.kind, change.subject.lower()): change for change in told.changes}
        for claim in row.claims.all():
            subject = "" if claim.kind == "identity" else claim.subject.lower()
            change = changes.get((claim.kind, subject))
            if change is not None and change.verdict != claim.computed_verdict:
                drafts.change_claim(
                    version_id=row.pk,
                    claim_id=claim.pk,
                    by=analyst,
                    verdict=change.verdict,
                    reason=change.reason,
                    edits=None,
                )
            elif claim.status == "proposed":
                drafts.confirm_claim(version_id=row.pk, claim_id=claim.pk, by=analyst)

    def _review(self, row: InterpretationVersion, told: records.Review) -> None:
        reviewer = self.people[told.by]
        reviewing.take(version_id=row.pk, by=reviewer)
        points = list(row.points.all())
        seen = points if told.decision else points[:1]
        for point in seen:
            reviewing.open_point(version_id=row.pk, point_id=point.pk, by=reviewer)
            if told.decision != "reject":
                reviewing.judge_point(
                    version_id=row.pk, point_id=point.pk, by=reviewer, judgement="agree", comment=told.comment
                )
        if told.decision == "approve":
            reviewing.approve(
                version_id=row.pk,
                by=reviewer,
                proof=self.proof(reviewer),
                content_hash=row.content_hash,
                comment=told.comment,
            )
        elif told.decision == "reject":
            reviewing.reject(
                version_id=row.pk,
                by=reviewer,
                proof=self.proof(reviewer),
                content_hash=row.content_hash,
                reasons=[{"point": points[0].key, "text": told.comment}, {"point": "", "text": told.reason}],
            )
