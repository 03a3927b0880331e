"""Load the invented laboratory into its own empty database, or print its accounts."""

from django.core.management.base import BaseCommand, CommandError

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
        try:
            demonstration.load(say=lambda step: self._say(step))
        except DomainError as error:
            raise CommandError(f"{error.message} {error.remedy}".strip()) from None
        self._say("the demonstration laboratory is loaded")

    def _say(self, step: str) -> None:
        self.stdout.write(f"demo: {step}")
        self.stdout.flush()
