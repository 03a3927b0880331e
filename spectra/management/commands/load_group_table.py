"""`manage.py load_group_table --by USERNAME [FILE]`: a draft of the group table; it is approved on its page."""

from __future__ import annotations

from pathlib import Path

from django.core.management.base import BaseCommand, CommandError

from labsite.errors import DomainError
from spectra import selectors_master
from spectra.services import master


class Command(BaseCommand):
    help = "Load the shipped group table, or the one in FILE, as a draft. Somebody else approves it on its page."

    def add_arguments(self, parser):
        parser.add_argument("file", nargs="?", type=Path, help="a table in place of the shipped one")
        parser.add_argument(
            "--by", required=True, metavar="USERNAME", help="the method owner in whose name it is loaded"
        )

    def handle(self, *args, file: Path | None, by: str, **options):
        try:
            text = file.read_text(encoding="utf-8") if file else selectors_master.shipped_group_table()
            row = master.load_group_table(by=selectors_master.person_named(by), text=text)
        except (OSError, UnicodeDecodeError) as error:
            raise CommandError(f"{file} cannot be read: {error}") from None
        except DomainError as error:
            raise CommandError(f"{error.message} {error.remedy}".strip()) from None
        self.stdout.write(f"Loaded as a draft: {row}. A second person approves it on the page Procedures, Group table.")
