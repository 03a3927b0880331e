"""The trail as it is stored. Only `record.py` writes these tables; the database refuses every change of a row."""

from __future__ import annotations

from django.db import models

from .triggers import register_append_only, register_trigger


class TrailEntry(models.Model):
    """One thing that happened. `canonical` is the record; every other column is derived from it, for search."""

    seq = models.BigIntegerField(primary_key=True)
    canonical = models.BinaryField()
    entry_hash = models.CharField(max_length=64)
    at = models.DateTimeField()
    event = models.CharField(max_length=60)
    actor_id = models.BigIntegerField(null=True)
    actor_roles = models.CharField(max_length=200)
    subject_kind = models.CharField(max_length=60)
    subject_id = models.CharField(max_length=200)
    subject_label = models.TextField()
    reason = models.TextField()
    request_id = models.CharField(max_length=64)
    search_text = models.TextField()

    class Meta:
        indexes = [
            models.Index(fields=["subject_kind", "subject_id", "seq"], name="trail_by_subject"),
            models.Index(fields=["event", "seq"], name="trail_by_event"),
            models.Index(fields=["actor_id", "seq"], name="trail_by_actor"),
            models.Index(fields=["at"], name="trail_by_time"),
        ]

    def __str__(self) -> str:
        return f"entry {self.seq}: {self.event}"


class TrailPersonal(models.Model):
    """Who it was, by name and address, apart from the entry: the entry holds only a salted hash of `details`."""

    entry = models.OneToOneField(TrailEntry, on_delete=models.PROTECT, primary_key=True, related_name="personal")
    salt = models.BinaryField()
    details = models.BinaryField()


class TrailHead(models.Model):
    """One row: the last sequence number and its hash. Locked briefly by whoever appends."""

    ONLY = 1

    id = models.SmallIntegerField(primary_key=True)
    seq = models.BigIntegerField()
    entry_hash = models.CharField(max_length=64)

    class Meta:
        constraints = [models.CheckConstraint(condition=models.Q(id=1), name="trail_one_head")]


register_append_only(TrailEntry._meta.db_table)
register_append_only(TrailPersonal._meta.db_table)
register_append_only(TrailHead._meta.db_table, updates=True)
register_trigger(
    "trail_head_moves_forward",
    TrailHead._meta.db_table,
    when="BEFORE UPDATE",
    sqlite="SELECT RAISE(ABORT, 'the head of the trail only moves forward') WHERE NEW.seq <= OLD.seq;",
    postgres="IF NEW.seq <= OLD.seq THEN RAISE EXCEPTION 'the head of the trail only moves forward'"
    " USING ERRCODE = 'integrity_constraint_violation'; END IF;",
)
