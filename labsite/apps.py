from django.apps import AppConfig


class LabsiteConfig(AppConfig):
    name = "labsite"
    label = "labsite"
    verbose_name = "laboratory"

    def ready(self) -> None:
        from . import checks  # noqa: F401  (registers the checks)
