"""What this layer guards: rows the database itself refuses to change, and checks that verification runs over them."""

from __future__ import annotations

from labsite.trail.triggers import register_append_only, register_trigger
from labsite.trail.verify import register_verifier
from spectra.integrity.analyses import damaged_analyses
from spectra.integrity.evidence import damaged_evidence, damaged_files
from spectra.integrity.laboratory import damaged_laboratory
from spectra.integrity.master import changed_master_data
from spectra.services.approvals import APPROVABLE

KEPT = "spectrum upload examination sample container delivery".split()


def register() -> None:
    register_append_only("spectra_rawfile")
    register_append_only("spectra_contribution")
    register_append_only("spectra_instrumentcheck")
    register_append_only("spectra_analysis", updates=True)
    for name in KEPT:
        register_append_only(f"spectra_{name}", updates=True)
    for model, _ in APPROVABLE.values():
        register_append_only(model._meta.db_table, updates=True)
    final = "a finished analysis is never changed"
    register_trigger(
        "finished_analysis_is_final",
        "spectra_analysis",
        sqlite=f"SELECT RAISE(ABORT, '{final}') WHERE OLD.state IN ('done', 'failed');",
        postgres=f"""
            IF OLD.state IN ('done', 'failed')
            THEN RAISE EXCEPTION '{final}' USING ERRCODE = 'integrity_constraint_violation'; END IF;
        """,
        when="BEFORE UPDATE",
    )
    register_verifier("raw files", damaged_files)
    register_verifier("files and spectra", damaged_evidence)
    register_verifier("analyses", damaged_analyses)
    register_verifier("approved master data", changed_master_data)
    register_verifier("samples and instrument checks", damaged_laboratory)
