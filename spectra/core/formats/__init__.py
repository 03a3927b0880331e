"""Readers of spectrum files: bytes in, decoded blocks or exact refusals out."""

from spectra.core.formats.reading import read
from spectra.core.formats.stated import stated

__all__ = ["read", "stated"]
