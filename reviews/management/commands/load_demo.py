"""Load the invented laboratory into its own empty database, or print its accounts."""

from pathlib import Path

from django.conf import settings
from django.core.management import call_command
from django.core.management.base import BaseCommand, CommandError
from django.db import connection

from labsite.errors import DomainError
from reviews import demonstration


class Command(BaseCommand):
    help = "Load the demonstration laboratory into its own, empty database; do nothing where it is loaded."

    def add_arguments(self, parser):
        parser.add_argument("--accounts", action="store_true", help="only print the accounts and their password")

    def handle(self, *args, accounts: bool, **options):
        if accounts:
            for name, roles in demonstration.accounts_by_role():
                self.stdout.write(f"{name:<10} {roles}")
            self.stdout.write(f"password for each: {demonstration.PASSWORD}")
            return
        if demonstration.is_loaded():
            return
        if settings.DEMO and demonstration.is_begun() and connection.vendor == "sqlite":
            self._begin_anew()
        try:
            demonstration.load(say=self._say)
        except DomainError as error:
            raise CommandError(f"{error.message} {error.remedy}".strip()) from None
        self._say("the demonstration laboratory is loaded")

    def _begin_anew(self) -> None:
        """A loading that was interrupted leaves half a laboratory, in which nobody has worked: it was never served."""
        self._say("an earlier loading was interrupted; beginning anew")
        name = connection.settings_dict["NAME"]
        connection.close()
        for suffix in ("-wal", "-shm", ""):
            Path(f"{name}{suffix}").unlink(missing_ok=True)
        call_command("migrate", verbosity=0)

    def _say(self, step: str) -> None:
        self.stdout.write(f"demo: {step}")
        self.stdout.flush()
