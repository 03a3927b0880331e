"""The reviews layer: claims, proposals, second reading, decision; the pages that show them."""

from django.apps import AppConfig


class ReviewsConfig(AppConfig):
    name = "reviews"

    def ready(self) -> None:
        from labsite.context import register_place
        from reviews import integrity, trail_words
        from spectra.permissions import READERS

        integrity.register()
        trail_words.register()
        register_place("Today", "reviews:today", order=10)
        register_place("Samples", "reviews:samples", roles=READERS, order=20)
