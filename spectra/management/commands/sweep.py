"""The sweep: takes up what a lost worker left, rings again for what waits, and lets time do what it does."""

import time

from django.core.management.base import BaseCommand
from django.db import OperationalError, close_old_connections

from spectra import hooks
from spectra.services import analyses


class Command(BaseCommand):
    help = "Take up analyses that a lost worker left, and ring for those that wait."

    def add_arguments(self, parser):
        parser.add_argument("--every", type=float, default=0.0, metavar="SECONDS", help="go on, with this pause")

    def handle(self, *args, every: float, **options):
        watch = analyses.Watch()
        while True:
            try:
                swept = analyses.sweep(watch=watch, now_s=time.monotonic())
                hooks.swept()
            except OperationalError as error:  # the database is away or busy: the next round tries again
                self.stderr.write(f"sweep: {error}")
            else:
                for pid in swept.stale_pids:
                    self.stdout.write(f"stale-worker {pid}")
                    self.stdout.flush()
            if not every:
                return
            close_old_connections()
            time.sleep(every)
