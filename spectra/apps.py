"""The spectra layer: from bytes to evidence, and the master data that governs it."""

from django.apps import AppConfig

PLACES = (
    ("Shelf", "spectra:shelf", 30),
    ("Materials", "spectra:materials", 40),
    ("Procedures", "spectra:procedures", 50),
    ("Instruments", "spectra:instruments", 60),
)


class SpectraConfig(AppConfig):
    name = "spectra"

    def ready(self) -> None:
        from labsite.context import register_place
        from spectra import integrity, trail_words
        from spectra.permissions import READERS

        integrity.register()
        trail_words.register()
        for label, url_name, order in PLACES:
            register_place(label, url_name, roles=READERS, order=order)
