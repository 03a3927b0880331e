"""`manage.py first_administrator`: the account that opens all others, while there is none."""

from __future__ import annotations

import getpass
import os

from django.core.management.base import BaseCommand, CommandError, CommandParser

from labsite.accounts import selectors, services
from labsite.errors import DomainError

PASSWORD_VARIABLE = "BANDLEDGER_FIRST_PASSWORD"


class Command(BaseCommand):
    help = (
        "Open the account of the first lab administrator. Asks for what is not given; for an unattended start give the"
        f" options and put the password into the environment as {PASSWORD_VARIABLE}."
    )

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("--username", help="for signing in")
        parser.add_argument("--printed-name", help="as it stands beside signatures")
        parser.add_argument(
            "--if-none", action="store_true", help="say nothing and succeed if there are accounts already"
        )

    def handle(self, *args: object, **options: object) -> None:
        if selectors.anybody():
            if options["if_none"]:
                return
            raise CommandError("This laboratory already has accounts; a lab administrator opens further ones.")
        try:
            username = options["username"] or input("User name of the first lab administrator: ")
            printed_name = options["printed_name"] or input("Printed name, as it stands beside signatures: ")
            password = os.environ.get(PASSWORD_VARIABLE) or self._ask_password()
            user = services.create_first_administrator(username=username, printed_name=printed_name, password=password)
        except DomainError as error:
            raise CommandError(f"{error.message} {error.remedy}".strip()) from None
        except (EOFError, KeyboardInterrupt):
            raise CommandError(
                f"No account was opened. Without a terminal, put the password into the environment as "
                f"{PASSWORD_VARIABLE} and run: "
                "python3 manage.py first_administrator --username … --printed-name …; then start --own again."
            ) from None
        self.stdout.write(f"{user.printed_name} can sign in now as {user.username}.")

    def _ask_password(self) -> str:
        password = getpass.getpass("Password: ")
        if getpass.getpass("Password once more: ") != password:
            raise CommandError("The two passwords differ. Nothing was set up.")
        return password
