from django.apps import AppConfig
from django.core.checks import Tags, register
from django.db.models.signals import post_migrate


class TrailConfig(AppConfig):
    name = "labsite.trail"
    label = "trail"
    verbose_name = "audit trail"

    def ready(self) -> None:
        from labsite.context import register_place

        from .triggers import check_triggers, install_triggers

        post_migrate.connect(install_triggers, sender=self, dispatch_uid="trail.install_triggers")
        register(check_triggers, Tags.database)
        register_place("Trail", "trail:search", order=80)
