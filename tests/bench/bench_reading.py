"""Speed of reading, all checks on, beside the PyPI reader `jcamp` in one run, and the bounds on hostile input.

Run: python -m tests.bench.bench_reading
Prints processor times; exits 1 where a target is missed: not slower than `jcamp` on packed 14,000-point files, five
times faster on the 16,384-point table in DIF form, and no hostile input above 2 s or 300 MB.
"""

from __future__ import annotations

import contextlib
import io
import multiprocessing
import re
import resource
import sys
import time
from collections.abc import Callable, Iterator

from spectra.core.formats import read
from spectra.core.types import Ordinate, ReadOptions, SpectrumBlock
from tests import outside

ROUNDS = 25
LONGEST_S, LARGEST_MB = 2.0, 300.0
HEADER = b"##TITLE=t\n##DATA TYPE=INFRARED SPECTRUM\n##XUNITS=1/CM\n##YUNITS=ABSORBANCE\n##XFACTOR=1\n##YFACTOR=1\n"


def as_infrared(data: bytes) -> bytes:
    """A published test table of another technique under an infrared header, so that both readers decode it."""
    for label, value in ((rb"DATA ?TYPE", b"INFRARED SPECTRUM"), (rb"XUNITS", b"1/CM"), (rb"YUNITS", b"ABSORBANCE")):
        data = re.sub(
            rb"(?mi)^##" + label + rb"[ \t]*=[^\r\n]*", b"##" + label.replace(b" ?", b" ") + b"=" + value, data
        )
    return data


def fastest_ms(*works: Callable[[], object]) -> list[float]:
    """The shortest processor time of each, taken in turns, so that a busy machine slows both alike."""
    shortest = [float("inf")] * len(works)
    for _ in range(ROUNDS):
        for place, work in enumerate(works):
            start = time.process_time()
            work()
            shortest[place] = min(shortest[place], time.process_time() - start)
    return [1e3 * seconds for seconds in shortest]


def beside_jcamp(name: str, data: bytes, options: ReadOptions) -> float:
    """Print both times; return how many times faster this reader is."""
    import jcamp

    def theirs() -> None:
        with contextlib.redirect_stdout(io.StringIO()):
            jcamp.read(io.BytesIO(data))

    blocks = read(data, options).blocks
    assert blocks and isinstance(blocks[0], SpectrumBlock), f"{name} was not read"
    ours_ms, theirs_ms = fastest_ms(lambda: read(data, options), theirs)
    print(
        f"{name:44s} {len(blocks[0].y):6d} points  {ours_ms:7.2f} ms  jcamp {theirs_ms:7.2f} ms  ratio "
        f"{theirs_ms / ours_ms:5.1f}"
    )
    return theirs_ms / ours_ms


def hostile_inputs() -> Iterator[tuple[str, bytes]]:
    room = 32 * 1024 * 1024 - 2000
    points = 1_000_000
    ends = f"##FIRSTX=0\n##LASTX={points - 1}\n##NPOINTS={points}\n##XYDATA=(X++(Y..Y))\n".encode()
    table = b"##XYDATA=(X++(Y..Y))\n"
    long_lines = room // 60_001
    yield "only line ends", b"\n" * room + b"x"
    yield (
        "a million packed points",
        HEADER + ends + b"".join(b"%d" % i + b"+1" * 10 + b"\n" for i in range(0, points, 10)) + b"##END=\n",
    )
    yield (
        "a million long decimals",
        HEADER + ends + b"".join(b"%d" % i + b" 0.123456789012" * 5 + b"\n" for i in range(0, points, 5)) + b"##END=\n",
    )
    yield (
        "a million differences",
        HEADER + ends + b"".join(b"%dA" % i + b"J" * 50 + b"\n" for i in range(0, points, 50)) + b"##END=\n",
    )
    yield "one endless figure", HEADER + table + (b"1" * 60_000 + b"\n") * long_lines
    yield "sixteen million numbers", HEADER + table + (b"1 " * 30_000 + b"\n") * long_lines
    yield "thirty million letters", HEADER + table + (b"A" * 60_000 + b"\n") * long_lines
    yield "thirty million E", HEADER + table + (b"E" * 60_000 + b"\n") * long_lines
    yield "exponents without sign", HEADER + table + (b"1E2 " * 15_000 + b"\n") * long_lines
    yield "exponents with sign", HEADER + table + (b"1e-5 " * 12_000 + b"\n") * long_lines
    yield "abscissae with exponents", HEADER + table + b"1e-5 1\n" * 400_000
    yield "a hundred million repeats", HEADER + table + b"400 5S99999999\n"
    yield "titles without end", b"##TITLE=a\n" * 400_000
    yield "labels without end", b"##TITLE=a\n" + b"##A=a\n" * 400_000
    yield "comments without end", HEADER + table + b"$$ x\n" * 400_000
    yield "a long header", HEADER + b"##X=\n" + (b"a" * 60_000 + b"\n") * 500
    yield "half a million delimited rows", b"cm-1,A\n" + b"\n".join(b"%d,0.12345" % i for i in range(490_000))
    yield (
        "twenty columns",
        b"cm-1" + b",A" * 20 + b"\n" + b"\n".join(b"%d" % i + b",0.12345" * 20 for i in range(49_000)),
    )
    yield "tabs and blanks", (b"1 \t" * 20_000 + b"x\n") * 500
    yield "separators alone", HEADER + b"##XYPOINTS=(XY..XY)\n" + (b";," * 30_000 + b"\n") * 500
    yield "two hundred megabytes", b"1 2\n" * 50_000_000


def _measure(data: bytes, answers: multiprocessing.Queue) -> None:
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    start = time.perf_counter()
    result = read(data)
    seconds = time.perf_counter() - start
    grown_mb = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) / 1024
    codes = (
        [result.problem.code]
        if result.problem
        else [getattr(getattr(block, "problem", None), "code", "read") for block in result.blocks[:2]]
    )
    answers.put((seconds, grown_mb, codes))


def hostile_ok() -> bool:
    """Read each hostile input in a process of its own; print time and growth of its memory."""
    good = True
    for name, data in hostile_inputs():
        answers: multiprocessing.Queue = multiprocessing.Queue()
        child = multiprocessing.Process(target=_measure, args=(data, answers))
        child.start()
        seconds, grown_mb, codes = answers.get(timeout=120)
        child.join()
        held = seconds <= LONGEST_S and grown_mb <= LARGEST_MB
        good &= held
        print(
            f"{name:32s} {len(data) / 1e6:7.1f} MB {seconds:6.2f} s {grown_mb:7.0f} MB  "
            f"{', '.join(codes)}{'' if held else '  TOO MUCH'}"
        )
    return good


def main() -> int:
    good = True
    for name in ("acetone", "ethyl acetate", "chloroform"):
        good &= beside_jcamp(name, outside.collection_file(f"infrared_spectra/{name}.jdx"), ReadOptions()) >= 1
    table = as_infrared(outside.collection_file("test/brukdif.jdx"))
    good &= beside_jcamp("16,384-point table in DIF form", table, ReadOptions(ordinate=Ordinate.ABSORPTIVITY)) >= 5
    for name in ("infrared_spectra/sulphur hexafluoride.jdx", "infrared_spectra/water.jdx", "dupdec1.jdx"):
        beside_jcamp(name, outside.collection_file(name), ReadOptions())
    return 0 if hostile_ok() and good else 1


if __name__ == "__main__":
    sys.exit(main())
