"""Every kind of event that the trail can hold. A closed list: what is not here cannot be recorded."""

from __future__ import annotations

from enum import StrEnum
from typing import NamedTuple


class Subject(NamedTuple):
    """What an entry is about: the kind of record, its id, and how people know it (no personal name)."""

    kind: str
    id: str | int
    label: str


class Event(StrEnum):
    ACCOUNT_CREATED = "account.created"
    ACCOUNT_ROLE_GRANTED = "account.role_granted"
    ACCOUNT_ROLE_REVOKED = "account.role_revoked"
    ACCOUNT_DEACTIVATED = "account.deactivated"
    ACCOUNT_REACTIVATED = "account.reactivated"
    ACCOUNT_PASSWORD_CHANGED = "account.password_changed"
    ACCOUNT_PASSWORD_RESET = "account.password_reset"
    SESSION_SIGNED_IN = "session.signed_in"
    SESSION_SIGN_IN_FAILED = "session.sign_in_failed"
    SESSION_LOCKED_OUT = "session.locked_out"
    SESSION_SIGNED_OUT = "session.signed_out"
    SESSION_EXPIRED = "session.expired"
    SETTING_CHANGED = "setting.changed"
    SIGNATURE_MADE = "signature.made"
    SIGNATURE_FAILED = "signature.failed"
    TRAIL_VERIFIED = "trail.verified"
    TRAIL_EXPORTED = "trail.exported"
    TRAIL_RECORD_EXPORTED = "trail.record_exported"
    MATERIAL_DRAFTED = "material.drafted"
    MATERIAL_CHANGED = "material.changed"
    MATERIAL_APPROVED = "material.approved"
    MATERIAL_RETIRED = "material.retired"
    PROCEDURE_DRAFTED = "procedure.drafted"
    PROCEDURE_CHANGED = "procedure.changed"
    PROCEDURE_APPROVED = "procedure.approved"
    METHOD_DRAFTED = "method.drafted"
    METHOD_APPROVED = "method.approved"
    GROUP_TABLE_LOADED = "group_table.loaded"
    GROUP_TABLE_APPROVED = "group_table.approved"
    REFERENCE_REGISTERED = "reference.registered"
    REFERENCE_APPROVED = "reference.approved"
    REFERENCE_WITHDRAWN = "reference.withdrawn"
    WATCH_LIST_CHANGED = "watch_list.changed"
    WATCH_LIST_APPROVED = "watch_list.approved"
    INSTRUMENT_REGISTERED = "instrument.registered"
    INSTRUMENT_CHANGED = "instrument.changed"
    INSTRUMENT_CHECK_RECORDED = "instrument_check.recorded"
    COMPETENCE_RECORDED = "competence.recorded"
    DELIVERY_REGISTERED = "delivery.registered"
    CONTAINER_REGISTERED = "container.registered"
    SAMPLE_REGISTERED = "sample.registered"
    SAMPLE_CHANGED = "sample.changed"
    EXAMINATION_OPENED = "examination.opened"
    RAW_FILE_STORED = "raw_file.stored"
    RAW_FILE_REFUSED = "raw_file.refused"
    RAW_FILE_ANSWERED = "raw_file.answered"
    SPECTRUM_READ = "spectrum.read"
    SPECTRUM_EXCLUDED = "spectrum.excluded"
    SPECTRUM_ROLE_CHANGED = "spectrum.role_changed"
    ANALYSIS_QUEUED = "analysis.queued"
    ANALYSIS_STARTED = "analysis.started"
    ANALYSIS_FINISHED = "analysis.finished"
    ANALYSIS_FAILED = "analysis.failed"
    ANALYSIS_TAKEN_OVER = "analysis.taken_over"
    ANALYSIS_RETRIED = "analysis.retried"
    CLAIM_DRAFTED = "claim.drafted"
    CLAIM_CONFIRMED = "claim.confirmed"
    CLAIM_CHANGED = "claim.changed"
    CLAIM_ADDED = "claim.added"
    CLAIM_REMOVED = "claim.removed"
    INTERPRETATION_DRAFTED = "interpretation.drafted"
    INTERPRETATION_CONCLUSION_WRITTEN = "interpretation.conclusion_written"
    INTERPRETATION_SUBMITTED = "interpretation.submitted"
    INTERPRETATION_TAKEN = "interpretation.taken"
    INTERPRETATION_HANDED_BACK = "interpretation.handed_back"
    INTERPRETATION_TIMED_OUT = "interpretation.timed_out"
    INTERPRETATION_BLIND_RECORDED = "interpretation.blind_recorded"
    INTERPRETATION_POINT_OPENED = "interpretation.point_opened"
    INTERPRETATION_POINT_JUDGED = "interpretation.point_judged"
    INTERPRETATION_DISAGREEMENT_WRITTEN = "interpretation.disagreement_written"
    INTERPRETATION_DISAGREEMENT_ANSWERED = "interpretation.disagreement_answered"
    INTERPRETATION_DISAGREEMENT_SETTLED = "interpretation.disagreement_settled"
    INTERPRETATION_APPROVED = "interpretation.approved"
    INTERPRETATION_REJECTED = "interpretation.rejected"
    INTERPRETATION_REVISED = "interpretation.revised"
    INTERPRETATION_WITHDRAWN = "interpretation.withdrawn"
    INTERPRETATION_SUPERSEDED = "interpretation.superseded"
    DEMO_LOADED = "demo.loaded"
    BACKUP_MADE = "backup.made"

    @property
    def label(self) -> str:
        """The event in words, for people."""
        return _WORDS.get(self) or in_words(self.value)

    @property
    def group(self) -> str:
        """The kind of thing that it happens to, in words."""
        return in_words(self.value.partition(".")[0])


_WORDS = {
    Event.SESSION_SIGNED_IN: "Signed in",
    Event.SESSION_SIGN_IN_FAILED: "Sign-in failed",
    Event.SESSION_LOCKED_OUT: "Locked out after failed sign-ins",
    Event.SESSION_SIGNED_OUT: "Signed out",
    Event.SESSION_EXPIRED: "Session ended by its time limit",
    Event.SIGNATURE_FAILED: "Signature refused: password did not match",
    Event.TRAIL_RECORD_EXPORTED: "History of one record exported",
    Event.RAW_FILE_ANSWERED: "Question about a raw file answered",
    Event.ANALYSIS_TAKEN_OVER: "Analysis taken over from a stopped worker",
    Event.INTERPRETATION_BLIND_RECORDED: "Interpretation: blind reading recorded",
    Event.INTERPRETATION_POINT_OPENED: "Interpretation: point opened",
    Event.INTERPRETATION_POINT_JUDGED: "Interpretation: point judged",
    Event.INTERPRETATION_CONCLUSION_WRITTEN: "Interpretation: conclusion written",
    Event.INTERPRETATION_DISAGREEMENT_WRITTEN: "Interpretation: disagreement written down",
    Event.INTERPRETATION_DISAGREEMENT_ANSWERED: "Interpretation: disagreement answered",
    Event.INTERPRETATION_TAKEN: "Interpretation taken for review",
    Event.DEMO_LOADED: "Demonstration loaded",
}


def in_words(name: str) -> str:
    """`group_table.approved` as `Group table approved`."""
    return name.replace(".", " ").replace("_", " ").capitalize()
