from django.apps import AppConfig


class AccountsConfig(AppConfig):
    name = "labsite.accounts"
    label = "accounts"
    verbose_name = "accounts"

    def ready(self) -> None:
        from labsite.context import register_place
        from labsite.trail.verify import register_verifier
        from labsite.trail.words import register_words

        from .models import Role
        from .verify import account_damages

        register_place("People", "accounts:people", roles=(Role.LAB_ADMINISTRATOR,), order=90)
        register_verifier("accounts", account_damages)
        register_words(values={"role": dict(Role.choices), "roles": dict(Role.choices)})
