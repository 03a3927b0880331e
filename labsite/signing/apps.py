from django.apps import AppConfig


class SigningConfig(AppConfig):
    name = "labsite.signing"
    label = "signing"
    verbose_name = "electronic signatures"

    def ready(self) -> None:
        from labsite.trail.verify import register_verifier
        from labsite.trail.words import register_words

        from .models import Meaning
        from .verify import signature_damages

        register_verifier("signatures", signature_damages)
        register_words(values={"meaning": dict(Meaning.choices)})
