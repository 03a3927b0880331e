"""`manage.py examine FILE...`: read spectrum files from the shell, outside the record and without the database."""

import argparse
import json
import os
import sys
from pathlib import Path

from django.conf import settings
from django.core.management.base import BaseCommand

from spectra.core.types import AxisUnit, Conditions, Ordinate, Phase, ReadOptions, Technique
from spectra.examine import (
    CannotStart,
    Examiner,
    Request,
    plain_painter,
    report_of,
    terminal_painter,
)

ORDINATES = ("absorbance", "transmittance", "percent_transmittance", "reflectance")
BAR_WIDTH = 30


def column_list(text: str) -> tuple[int, ...]:
    try:
        columns = tuple(int(part) for part in text.split(","))
    except ValueError:
        columns = ()
    if not columns or any(column < 1 for column in columns):
        raise argparse.ArgumentTypeError("write ordinate columns as numbers from 1, separated by commas, like 1,3")
    return columns


class Command(BaseCommand):
    help = "Read spectrum files and show what they carry. A trial look: not a record; nothing is stored."
    requires_system_checks = []

    def add_arguments(self, parser):
        parser.add_argument("files", nargs="+", metavar="FILE", help="JCAMP-DX or delimited text")
        parser.add_argument("--declared", type=Path, metavar="FILE", help="reference spectrum of the declared material")
        parser.add_argument(
            "--watch",
            type=Path,
            metavar="FILE",
            action="append",
            default=[],
            help="spectrum of a contaminant to look for; may be repeated",
        )
        parser.add_argument("--smiles", metavar="TEXT", help="declared structure")
        parser.add_argument("--x-unit", choices=[unit.value for unit in AxisUnit], help="unit of the axis")
        parser.add_argument("--ordinate", choices=ORDINATES, help="what the numbers mean")
        parser.add_argument("--columns", type=column_list, metavar="LIST", help="ordinate columns of a table, like 1,3")
        parser.add_argument("--phase", choices=[phase.value for phase in Phase])
        parser.add_argument("--technique", choices=[technique.value for technique in Technique])
        parser.add_argument("--json", action="store_true", help="one JSON object a line for each spectrum")

    def handle(self, *args, **options):
        if not getattr(settings, "EXAMINE", True):
            self.stderr.write(
                "examine is switched off here (BANDLEDGER_EXAMINE): bring spectra in through the web pages."
            )
            raise SystemExit(2)
        technique = Technique(options["technique"]) if options["technique"] else None
        request = Request(
            options=ReadOptions(
                x_unit=AxisUnit(options["x_unit"]) if options["x_unit"] else None,
                ordinate=Ordinate(options["ordinate"]) if options["ordinate"] else None,
                columns=options["columns"],
                technique=technique,
            ),
            conditions=Conditions(technique=technique, phase=Phase(options["phase"]) if options["phase"] else None),
            declared=options["declared"],
            watch=tuple(options["watch"]),
            smiles=options["smiles"],
        )
        if request.watch and not request.declared:
            self.stderr.write(
                "--watch needs --declared: contaminants are looked for in what the reference leaves over."
            )
            raise SystemExit(2)
        try:
            examiner = Examiner(request)
        except CannotStart as error:
            self.stderr.write(str(error))
            raise SystemExit(2) from error
        try:
            refused = self._run(examiner, options["files"], options["json"])
        except BrokenPipeError:
            # The reader of the pipe has seen enough; what is still buffered must not raise again at exit.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            raise SystemExit(1) from None
        if refused:
            raise SystemExit(1)

    def _run(self, examiner, files, as_json):
        out = self.stdout._out if hasattr(self.stdout, "_out") else self.stdout
        coloured = not as_json and _is_terminal(out) and not os.environ.get("NO_COLOR")
        paint = terminal_painter if coloured else plain_painter
        bar = _is_terminal(sys.stderr) and len(files) > 3
        refused = False
        for number, name in enumerate(files, start=1):
            if bar:
                _draw(number - 1, len(files))
            for examined in examiner.examine(Path(name), name):
                refused |= examined.document["status"] == "refused"
                if bar:
                    _wipe()
                if as_json:
                    text = json.dumps(examined.document, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
                else:
                    text = report_of(examined, paint) + "\n"
                out.write(text + "\n")
                out.flush()
        if bar:
            _wipe()
        return refused


def _is_terminal(stream) -> bool:
    return bool(getattr(stream, "isatty", lambda: False)())


def _draw(done: int, total: int) -> None:
    filled = BAR_WIDTH * done // total
    sys.stderr.write(f"\r[{'#' * filled}{'.' * (BAR_WIDTH - filled)}] {done} of {total} files")
    sys.stderr.flush()


def _wipe() -> None:
    sys.stderr.write("\r" + " " * (BAR_WIDTH + 30) + "\r")
    sys.stderr.flush()
