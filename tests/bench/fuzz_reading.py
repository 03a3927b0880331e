"""Random damage to real and made-up files: the readers must answer each with a result or a refusal, quickly.

Run: python -m tests.bench.fuzz_reading [CASES] [SEED]. Exits 1 when a case raises or takes longer than 2 s.
"""

from __future__ import annotations

import collections
import random
import sys
import time
import traceback
from collections.abc import Iterator
from pathlib import Path

from spectra.core.formats import read
from spectra.core.types import AxisUnit, Ordinate, ReadOptions, ReadResult, RefusedBlock, Technique

DAMAGED = Path(__file__).parents[2] / "fixtures" / "damaged"
LARGEST_SEED_BYTES = 40_000
LONGEST_S = 2.0
ANSWERS = (
    ReadOptions(),
    ReadOptions(x_unit=AxisUnit.CM1, ordinate=Ordinate.ABSORPTIVITY),
    ReadOptions(x_unit=AxisUnit.MICROMETRE, ordinate=Ordinate.REFLECTANCE, technique=Technique.ATR, columns=(2,)),
    ReadOptions(x_unit=AxisUnit.NANOMETRE, ordinate=Ordinate.TRANSMITTANCE, columns=(3, 2)),
)
_TOKENS = (
    b"##END=\n",
    b"##TITLE=x\n",
    b"##XYDATA=(X++(Y..Y))\n",
    b"##XYPOINTS=(XY..XY)\n",
    b"##NTUPLES=\n",
    b"##NPOINTS=1e9\n",
    b"##XFACTOR=0\n",
    b"##YFACTOR=1e300\n",
    b"##FIRSTX=-1\n",
    b"$$",
    b"\x00",
    b"\x1a",
    b"\xff\xfe",
    b"\xef\xbb\xbf",
    b"\r",
    b"E+",
    b"1e308 ",
    b"Z99999999",
    b"%%%%",
    b"?",
    b",,",
    b";",
    b"\t",
    b"nan",
    b"-",
    b"+-",
    b".",
    b"@",
    b"\xc2\xb2",
    b"\n\n",
    b"9" * 400,
    b" " * 5000,
    b"1," * 70,
)


def seeds(outside_files: dict[str, bytes] | None = None) -> list[bytes]:
    """The small files of fixtures/damaged, and those of the open collection where it is at hand."""
    files = [path.read_bytes() for path in sorted(DAMAGED.iterdir()) if path.suffix not in (".md", ".json")]
    return files + [data for _, data in sorted((outside_files or {}).items()) if len(data) <= LARGEST_SEED_BYTES]


def mutated(files: list[bytes], cases: int, seed: int) -> Iterator[bytes]:
    """`cases` damaged files, the same for one seed: bytes changed, lines moved, pieces cut, doubled, inserted."""
    rng = random.Random(seed)
    for _ in range(cases):
        data = bytearray(rng.choice(files))
        for _ in range(rng.choice((1, 1, 1, 1, 2, 3, 8))):
            place = rng.randrange(len(data) + 1)
            end = min(len(data), place + rng.choice((1, 1, 2, 10, 80, 400)))
            match rng.choice((0, 0, 1, 1, 1, 2, 3, 4, 5, 6, 7, 8)):
                case 0 if place < len(data):
                    data[place] = rng.randrange(256)
                case 1 if place < len(data):
                    data[place] = rng.choice(b"0123456789+-.@AEJSTZ%jas \n,")
                case 2:
                    del data[place:end]
                case 3:
                    data[place:place] = rng.choice(_TOKENS)
                case 4:
                    data[place:place] = data[place:end]
                case 5:
                    del data[place:]
                case 6:
                    lines = bytes(data).split(b"\n")
                    rng.shuffle(lines) if rng.random() < 0.1 else lines.insert(
                        rng.randrange(len(lines)), lines.pop(rng.randrange(len(lines)))
                    )
                    data = bytearray(b"\n".join(lines))
                case 7:
                    other = rng.choice(files)
                    cut = rng.randrange(len(other) + 1)
                    data[place:place] = other[cut : cut + 500]
                case _:
                    lines = bytes(data).split(b"\n")
                    lines.pop(rng.randrange(len(lines)))
                    data = bytearray(b"\n".join(lines))
        yield bytes(data)


def outcome(result: ReadResult) -> str:
    if result.problem:
        return result.problem.code
    refused = [block.problem.code for block in result.blocks if isinstance(block, RefusedBlock)]
    return refused[0] if refused else "read"


def main() -> int:
    from tests import outside

    cases = int(sys.argv[1]) if len(sys.argv) > 1 else 10_000
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    counts: collections.Counter[str] = collections.Counter()
    slowest, failures = 0.0, 0
    for number, data in enumerate(mutated(seeds(outside.collection_files()), cases, seed)):
        start = time.perf_counter()
        try:
            counts[outcome(read(data, ANSWERS[number % len(ANSWERS)]))] += 1
        except Exception:  # noqa: BLE001 - the one place that looks for them
            failures += 1
            print(f"case {number}:")
            traceback.print_exc(limit=-3)
        slowest = max(slowest, time.perf_counter() - start)
    for code, count in counts.most_common():
        print(f"{count:7d}  {code}")
    print(f"{cases} cases, {failures} unhandled exceptions, slowest {slowest:.3f} s")
    return 1 if failures or slowest > LONGEST_S else 0


if __name__ == "__main__":
    sys.exit(main())
