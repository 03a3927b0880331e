from django.apps import AppConfig


class AccountsConfig(AppConfig):
    name = "labsite.accounts"
    label = "accounts"
    verbose_name = "accounts"

    def ready(self) -> None:
        from labsite.context import register_place

        from .models import Role

        register_place("People", "accounts:people", roles=(Role.LAB_ADMINISTRATOR,), order=90)
