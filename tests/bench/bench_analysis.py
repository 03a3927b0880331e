"""How well and how fast the analysis reads measured spectra whose truth is known.

Run: python -m tests.bench.bench_analysis [groups] [identity] [impurities] [speed]   (all of them without a name)
Exits 1 where a gate is missed. The group table and its parameters were tuned on these very spectra, so the group
figures are optimistic; groups without positives are not calibrated, and the list says which.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections import Counter, defaultdict
from dataclasses import replace

import numpy as np

from spectra.core import bands as band_picking
from spectra.core import identity, impurities, preparation
from spectra.core.groups import weigh_groups
from spectra.core.params import MethodParams
from spectra.core.pipeline import analyse
from spectra.core.results import Prepared, ReferenceInput, WatchInput
from spectra.core.types import Conditions, Ordinate, Phase, SpectrumBlock, frozen_array
from tests.bench.analysis_cases import Case, cases, collection_cases, film_cases, table

PARAMS = MethodParams()
WRONG_SHARE, PRECISION, DECIDED, POSITIVES_DECIDED = 0.01, 0.95, 0.80, 0.60


def prepared(case: Case) -> Prepared:
    return preparation.prepare(case.block, case.conditions, PARAMS)


def group_tally(chosen: list[Case]) -> tuple[Counter, dict[str, Counter], dict[int, list[int]], list[tuple]]:
    """Counts by (kind, verdict, truly there), the same by group, reliability by tenth, and the confident errors."""
    classes = {wider.id: set(wider.members) for wider in table().classes}
    total: Counter = Counter()
    by_group: dict[str, Counter] = defaultdict(Counter)
    reliability: dict[int, list[int]] = defaultdict(lambda: [0, 0])
    errors = []
    for case in chosen:
        if case.groups is None:
            continue
        ready = prepared(case)
        found = band_picking.pick(ready, PARAMS, case.conditions.phase)
        weighing = weigh_groups(ready, found, table(), case.conditions, PARAMS, expected=case.groups)
        blurred = {name for name, members in classes.items() if members & case.tolerated}
        for claim in weighing.claims:
            if claim.group == "peroxide" or claim.group in case.tolerated | blurred:
                continue
            is_class = claim.group in classes
            there = bool(classes[claim.group] & case.groups) if is_class else claim.group in case.groups
            total["class" if is_class else "group", claim.verdict, there] += 1
            by_group[claim.group][claim.verdict, there] += 1
            if not is_class:
                cell = reliability[min(9, int(10 * weighing.probability[claim.group]))]
                cell[0] += 1
                cell[1] += there
            if (claim.verdict, there) in (("supported", False), ("contradicted", True)):
                errors.append((case.name, claim.group, claim.verdict, round(weighing.probability[claim.group], 3)))
    return total, by_group, reliability, errors


def figures(total: Counter, kind: str) -> dict[str, float]:
    """Share decided (of what could be examined), share wrong of those, precision, share of true positives decided."""

    def count(verdict: str, there: bool) -> int:
        return total[kind, verdict, there]

    right = count("supported", True) + count("contradicted", False)
    wrong = count("supported", False) + count("contradicted", True)
    examined = right + wrong + count("undecided", True) + count("undecided", False)
    positives = sum(number for (k, _, there), number in total.items() if k == kind and there)
    supported = count("supported", True) + count("supported", False)
    return {
        "examined": examined,
        "decided": (right + wrong) / max(examined, 1),
        "wrong": wrong / max(right + wrong, 1),
        "wrong_count": wrong,
        "supported": supported,
        "precision": count("supported", True) / max(supported, 1),
        "positives": positives,
        "positives_decided": (count("supported", True) + count("contradicted", True)) / max(positives, 1),
    }


def bench_groups() -> bool:
    good = True
    for label, chosen in (
        ("all spectra", list(cases())),
        ("without inferred identities", [c for c in cases() if not c.inferred]),
    ):
        total, by_group, reliability, errors = group_tally(chosen)
        for kind in ("group", "class"):
            f = figures(total, kind)
            print(
                f"{label}, {kind}: {f['examined']} examined, decided {f['decided']:.3f}, wrong {100 * f['wrong']:.2f} "
                f"% ({f['wrong_count']}), supported {f['supported']} with precision {f['precision']:.3f}, "
                f"{f['positives']} positives, {f['positives_decided']:.3f} of them decided"
            )
        f = figures(total, "group")
        good &= (
            f["wrong"] <= WRONG_SHARE
            and f["precision"] >= PRECISION
            and f["decided"] >= DECIDED - 0.005
            and f["positives_decided"] >= POSITIVES_DECIDED
        )
        for error in errors:
            print("   confident error:", *error)
        if label == "all spectra":
            for name, counts in by_group.items():
                there = sum(number for (_, true), number in counts.items() if true)
                print(
                    f"   {name:22s} positives {there:3d} found {counts['supported', True]:3d} missed "
                    f"{counts['contradicted', True]:2d} wrong {counts['supported', False]:2d} undecided "
                    f"{counts['undecided', True]:3d}; ruled out {counts['contradicted', False]:3d} of "
                    f"{sum(n for (_, true), n in counts.items() if not true):3d}{'' if there else '   not calibrated'}"
                )
            print(
                "   stated probability by tenth (number, truly there):",
                {key: tuple(value) for key, value in sorted(reliability.items())},
            )
    return good


def bench_identity() -> bool:
    good = True
    for label, chosen in (("open collection", collection_cases()), ("films", film_cases())):
        ready = [(case, prepared(case)) for case in chosen if case.smiles or case.groups]
        verdicts: Counter = Counter()
        ranks = []
        for case, own in ready:
            scores = []
            for other, reference in ready:
                if other is case or other.conditions.phase is not case.conditions.phase:
                    continue
                found, _ = identity.compare(own, case.conditions, reference, other.conditions, other.name, PARAMS)
                same = other.key == case.key
                verdicts["same" if same else "different", found.verdict] += 1
                if not same and found.verdict == "consistent":
                    print("   wrong:", case.name, "is called", other.name)
                    good = False
                if same and found.verdict not in ("consistent", "cannot_be_compared"):
                    print(f"   {case.name} and {other.name}: {found.verdict}; {' '.join(found.against[:3])}")
                score = identity.main_score(found.metrics)
                scores.append((score if score is not None else -1.0, same))
            if any(same for _, same in scores):
                best_right = max(score for score, same in scores if same)
                best_wrong = max((score for score, same in scores if not same), default=-1.0)
                ranks.append((best_right > best_wrong, best_right - best_wrong))
        print(f"identity, {label}: {dict(verdicts)}")
        print(
            f"   right material first for {sum(first for first, _ in ranks)} of {len(ranks)}, least margin "
            f"{min(margin for _, margin in ranks):.3f}"
        )
    return good


def bench_impurities(rounds: int = 60) -> bool:
    """Mixtures of measured gases at SNR 1000 with shift, width, drift and scale, as fractions of peak height."""
    rng = np.random.default_rng(5)
    gas = Conditions(phase=Phase.GAS, resolution_cm1=4.0)
    grid = np.arange(600.0, 3960.0, 2.0)
    sources = {
        c.name: c.block
        for c in collection_cases()
        if c.block.ordinate_used is Ordinate.ABSORPTIVITY and len(c.block.x_cm1) < 20000
    }

    def trace(name: str, width: float, shift: float) -> np.ndarray:
        block = sources[name]
        low = preparation.gaussian_smooth(block.y, block.spacing_cm1, width)
        values = np.interp(grid - shift, block.x_cm1, low)
        return values / values.max()

    def as_block(values: np.ndarray) -> SpectrumBlock:
        return replace(
            next(iter(sources.values())),
            x_cm1=frozen_array(grid),
            y=frozen_array(values),
            ordinate_used=Ordinate.ABSORBANCE,
            headers={"RESOLUTION": "4"},
            findings=(),
        )

    def sample(name: str, fraction: float, other: str) -> Prepared:
        shift = rng.uniform(0.2, 0.5) * rng.choice([-1, 1])
        u = (grid - 2300) / 1700
        a = trace(name, rng.uniform(3.9, 4.15), shift) + 0.01 * rng.normal() * u
        a = (a + fraction * trace(other, 4.0, shift)) * rng.uniform(0.8, 1.2)
        return preparation.prepare(as_block(a + rng.normal(0, 1e-3, len(grid))), gas, PARAMS)

    library = {
        name: preparation.prepare(as_block(trace(name, 4.0, 0) + rng.normal(0, 2e-4, len(grid))), gas, PARAMS)
        for name in sources
    }
    names = list(library)
    tally: Counter = Counter()
    for _ in range(rounds):
        material = rng.choice(names)
        listed = [name for name in names if name != material]
        rng.shuffle(listed)
        watch = tuple(impurities.Candidate(name, library[name], gas) for name in listed[:8])
        pure, _ = impurities.screen(sample(material, 0, listed[0]), gas, library[material], gas, watch, PARAMS)
        tally["alarm on a pure sample"] += any(s.verdict == "found" for s in pure.screened) or bool(pure.unexplained)
        for fraction in (0.005, 0.01):
            found, _ = impurities.screen(
                sample(material, fraction, listed[0]), gas, library[material], gas, watch, PARAMS
            )
            tally[f"{100 * fraction:g} % found"] += found.screened[0].verdict == "found"
            tally[f"{100 * fraction:g} % with another name"] += any(s.verdict == "found" for s in found.screened[1:])
        unlisted, _ = impurities.screen(
            sample(material, 0.02, listed[0]), gas, library[material], gas, watch[1:], PARAMS
        )
        tally["2 % unlisted reported"] += bool(unlisted.unexplained)
        wrong, _ = impurities.screen(sample(material, 0, listed[0]), gas, library[listed[1]], gas, (), PARAMS)
        tally["wrong material accepted"] += wrong.explained_variance >= PARAMS.explained_variance
    print(f"impurities in {rounds} rounds: {dict(tally)}")
    return (
        tally["alarm on a pure sample"] <= 0.03 * rounds
        and tally["0.5 % found"] >= 0.9 * rounds
        and tally["1 % found"] >= 0.98 * rounds
        and tally["2 % unlisted reported"] >= 0.95 * rounds
        and tally["wrong material accepted"] == 0
    )


def bench_speed() -> bool:
    by_name = {case.name: case for case in cases()}
    film, reference = by_name["jtpolys.jdx"], by_name["dupdec1.jdx"]
    watch = tuple(WatchInput(name, case.block, film.conditions) for name, case in by_name.items() if "Zhang" in name)[
        :4
    ]
    good = True
    for label, case, options in (
        ("1,844 points, alone", film, {}),
        (
            "1,844 points, reference, four watch-list spectra, structure",
            film,
            {
                "reference": ReferenceInput("reference", reference.block, film.conditions),
                "watch": watch,
                "smiles": "*CC(*)c1ccccc1",
            },
        ),
        ("14,104 points, alone", by_name["chloroform.jdx"], {}),
    ):
        times = []
        for _ in range(7):
            started = time.perf_counter()
            analyse(case.block, conditions=case.conditions, params=PARAMS, table=table(), **options)
            times.append(time.perf_counter() - started)
        middle = statistics.median(times[1:])
        good &= middle < 0.25
        print(f"whole analysis, {label}: {1000 * middle:.0f} ms (first {1000 * times[0]:.0f} ms)")
    return good


def main() -> int:
    chosen = sys.argv[1:] or ["groups", "identity", "impurities", "speed"]
    parts = {"groups": bench_groups, "identity": bench_identity, "impurities": bench_impurities, "speed": bench_speed}
    outcomes = [parts[name]() for name in chosen]
    return 0 if all(outcomes) else 1


if __name__ == "__main__":
    sys.exit(main())
