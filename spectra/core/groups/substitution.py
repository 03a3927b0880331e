"""Aromatic substitution from the strong out-of-plane bands, allowed to answer "mono or meta"."""

from __future__ import annotations

from spectra.core.groups.features import Scene


def substitution_note(scene: Scene) -> str:
    """One sentence about the substitution, or an empty text where the bands fit no single pattern."""
    strong = [c.position_cm1 for c in scene.clusters if c.level >= 3 and 660 <= c.position_cm1 <= 910]

    def inside(low: float, high: float) -> list[float]:
        return [p for p in strong if low <= p <= high]

    low, mono, meta, para = inside(678, 715), inside(725, 772), inside(764, 815), inside(790, 862)
    if low and mono and meta and not para:
        kind, seen = "monosubstituted or meta", low + mono
    elif low and mono:
        kind, seen = "monosubstituted", low + mono
    elif low and meta:
        kind, seen = "meta", low + meta
    elif mono and not low and not para:
        kind, seen = "ortho", inside(735, 772) or mono
    elif para and not mono and not low:
        kind, seen = "para", para
    else:
        return ""
    places = ", ".join(f"{p:.0f}" for p in sorted(set(seen)))
    return f"Out-of-plane bands at {places} cm-1 fit a ring that is {kind}; polar substituents upset this rule."
