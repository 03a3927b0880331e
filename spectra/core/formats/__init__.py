"""Readers of spectrum files: bytes in, decoded blocks or exact refusals out."""

from spectra.core.formats.reading import read

__all__ = ["read"]
