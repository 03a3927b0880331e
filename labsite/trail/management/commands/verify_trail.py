"""`manage.py verify_trail`: is the trail whole, and are the records that hang on it?"""

from __future__ import annotations

import sys

from django.conf import settings
from django.core.management.base import BaseCommand, CommandError, CommandParser
from django.db import connection

from labsite.trail.verify import trigger_damages, verify


class Command(BaseCommand):
    help = (
        "Check every entry of the audit trail, the signatures and the raw files. Exit status 1 if anything is damaged."
    )

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("--fast", action="store_true", help="check the chain of entries alone")
        # Taken by manage.py itself before the settings are read; here so that the help shows it.
        parser.add_argument("--demo", action="store_true", help="the demonstration's trail, not your own laboratory's")

    def handle(self, *args: object, **options: object) -> None:
        if options["demo"] and not settings.DEMO:
            raise CommandError("--demo works as python3 manage.py verify_trail --demo; else set BANDLEDGER_DEMO=1.")
        terminal = self.stderr.isatty()

        def progress(done: int, of: int) -> None:
            if terminal:
                self.stderr.write(f"\r  {done} of {of} entries", ending="\n" if done == of else "")

        result = verify(progress, fast=options["fast"])
        which = "the demonstration" if settings.DEMO else "your own laboratory"
        self.stdout.write(f"{settings.LABORATORY_NAME} ({which}), database {connection.settings_dict['NAME']}")
        damages = [*result.damages, *(trigger_damages() if options["fast"] else ())]  # a whole run looks at them itself
        if damages:
            for damage in damages:
                self.stderr.write(f"{damage.where}: {damage.what}")
            self.stderr.write(f"The trail is NOT whole. First damage: {damages[0].where}.")
            sys.exit(1)
        covered = "chain of entries" if options["fast"] else "chain, columns, personal details, signatures and files"
        self.stdout.write(f"The trail is whole: {result.entries} entries ({covered}).")
        self.stdout.write(f"  newest entry  {result.head_hash}")
        self.stdout.write(f"  tree root     {result.root_hash}")
