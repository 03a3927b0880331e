"""Functional groups: what each window shows, the joint weighing, and the ledger with its verdicts."""

from spectra.core.groups.ledger import GroupWeighing, weigh_groups

__all__ = ["GroupWeighing", "weigh_groups"]
