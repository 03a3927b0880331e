"""The sentences of the ledger: what a window shows, in words with numbers and units."""

from __future__ import annotations

from spectra.core.groups.features import EDGE_SLACK_CM1, TABLE_LEVELS, Reading, Scene

INTENSITY_WORDS = {"vs": "very strong", "s": "strong", "m": "medium", "w": "weak", "vw": "very weak"}


def sentence_of(reading: Reading) -> str:
    """What one window shows, with place, size in the band table's own word, and window."""
    where = " or ".join(f"{low:.0f}-{high:.0f} cm-1" for low, high in reading.windows)
    row = reading.row
    if reading.too_strong is not None:
        return (
            f"{row.name}: the band at {reading.too_strong.position_cm1:.1f} cm-1 "
            f"({INTENSITY_WORDS[reading.too_strong.intensity]}) is stronger than this group shows in {where}, so "
            "it does not count; a weak band beneath it could not be seen."
        )
    if reading.state == "not_readable":
        return f"{row.name}: {where or 'no window in this phase'} cannot be read."
    if reading.state == "missing":
        return f"{row.name}: nothing in {where}, where a band is usually {_strength_word(row.strength)}."
    if row.kind == "plateau":
        return f"{row.name}: a very broad absorption across {where}, {100 * reading.share:.0f} % of the strongest band."
    strongest = max(reading.bands, key=lambda b: min(b.height_absorbance, 3 * b.prominence_absorbance))
    extra = f" and {len(reading.bands) - 1} more" if len(reading.bands) > 1 else ""
    doubt = (
        " Only a shoulder, so it counts little."
        if reading.by_shoulder
        else (" It is saturated: present, but its size is unknown." if strongest.kind == "saturated" else "")
    )
    outside = any(all(not low <= band.position_cm1 <= high for low, high in reading.windows) for band in reading.bands)
    slack = f", slack {EDGE_SLACK_CM1:g} cm-1" if outside else ""
    return (
        f"{row.name}: band at {strongest.position_cm1:.1f} cm-1 ({INTENSITY_WORDS[strongest.intensity]}, "
        f"{strongest.shape}, {strongest.height_absorbance:.3f} absorbance){extra}, window {where}{slack}.{doubt}"
    )


def weaker_than_usual(reading: Reading, scene: Scene) -> str:
    """The sentence for a band that is too small, with the scale where that is another than the band table's."""
    named = max((TABLE_LEVELS[band.intensity] for band in reading.bands), default=reading.level)
    scaled = " after depth scaling" if scene.depth_scaled and named > reading.level else ""
    return f"{reading.row.name}: the band is weaker than usual for this group{scaled}."


def _strength_word(strength: str) -> str:
    return {
        "s": "strong",
        "m-s": "medium to strong",
        "m": "medium",
        "w-s": "weak to strong",
        "w-m": "weak to medium",
        "w": "weak",
        "vw": "very weak",
        "v": "of varying strength",
    }[strength]
