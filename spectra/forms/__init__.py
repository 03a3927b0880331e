"""Forms of master data: text into values, and beside the field what is wrong with it. Rules live in the services."""

from spectra.forms.instruments import AccessoryFormSet, CheckForm, InstrumentForm, QualificationForm
from spectra.forms.materials import MaterialForm, RetireForm, WatchListForm
from spectra.forms.procedures import GroupTableForm, MethodForm, ProcedureForm
from spectra.forms.shelf import ReferenceForm

__all__ = [
    "AccessoryFormSet",
    "CheckForm",
    "GroupTableForm",
    "InstrumentForm",
    "MaterialForm",
    "MethodForm",
    "ProcedureForm",
    "QualificationForm",
    "ReferenceForm",
    "RetireForm",
    "WatchListForm",
]
