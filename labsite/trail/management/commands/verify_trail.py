"""`manage.py verify_trail`: is the trail whole, and are the records that hang on it?"""

from __future__ import annotations

import sys

from django.core.management.base import BaseCommand, CommandParser

from labsite.trail.triggers import missing_triggers
from labsite.trail.verify import Damage, verify


class Command(BaseCommand):
    help = (
        "Check every entry of the audit trail, the signatures and the raw files. Exit status 1 if anything is damaged."
    )

    def add_arguments(self, parser: CommandParser) -> None:
        parser.add_argument("--fast", action="store_true", help="check the chain of entries alone")

    def handle(self, *args: object, **options: object) -> None:
        terminal = self.stderr.isatty()

        def progress(done: int, of: int) -> None:
            if terminal:
                self.stderr.write(f"\r  {done} of {of} entries", ending="\n" if done == of else "")

        result = verify(progress, fast=options["fast"])
        damages = [*result.damages, *(Damage(f"trigger {name}", "missing or altered") for name in missing_triggers())]
        if damages:
            for damage in damages:
                self.stderr.write(f"{damage.where}: {damage.what}")
            self.stderr.write(f"The trail is NOT whole. First damage: {damages[0].where}.")
            sys.exit(1)
        covered = "chain of entries" if options["fast"] else "chain, columns, personal details, signatures and files"
        self.stdout.write(f"The trail is whole: {result.entries} entries ({covered}).")
        self.stdout.write(f"  newest entry  {result.head_hash}")
        self.stdout.write(f"  tree root     {result.root_hash}")
