"""`manage.py load_method --by USERNAME`: the shipped parameters as a draft; it is approved on its page."""

from __future__ import annotations

from django.core.management.base import BaseCommand, CommandError

from labsite.errors import DomainError
from spectra import selectors_master
from spectra.services import master


class Command(BaseCommand):
    help = "Load the shipped method parameters as a draft. Somebody else approves them on their page."

    def add_arguments(self, parser):
        parser.add_argument(
            "--by", required=True, metavar="USERNAME", help="the method owner in whose name it is loaded"
        )

    def handle(self, *args, by: str, **options):
        try:
            row = master.draft_method(by=selectors_master.person_named(by), name=selectors_master.SHIPPED_METHOD_NAME)
        except DomainError as error:
            raise CommandError(f"{error.message} {error.remedy}".strip()) from None
        self.stdout.write(f"Loaded as a draft: {row}. A second person approves it on the page Procedures, Methods.")
