"""On a screen 390 px wide every place of the navigation is in sight, and the cells of a wide table stay readable."""

from __future__ import annotations

from pathlib import Path

import pytest
from django.template.loader import render_to_string

CSS = Path(__file__).resolve().parents[2] / "labsite" / "static" / "lab"
NARROW = {"width": 390, "height": 844}
SCREENED = [
    {
        "name": name,
        "verdict": "not_found_above_limit",
        "agrees": "yes",
        "estimate_fraction": 0.0012,
        "standard_uncertainty": 0.0006,
        "detection_limit_fraction": 0.004,
    }
    for name in ("phthalate plasticiser", "hydrocarbon oil")
]
THREE_LINES_PX = 82  # with the cell's padding
TABLE = '<!doctype html><main class="page">{}</main>'


@pytest.mark.parametrize("who", ["analyst", "qa_manager"])
def test_every_place_of_the_navigation_is_in_sight(enter, laboratory, who):
    person = enter(who, **NARROW)
    person.open("/trail/")
    places = person.page.locator(".top-nav a")
    assert places.count() >= 7
    for place in places.all():
        box = place.bounding_box()
        assert box["x"] >= 0 and box["x"] + box["width"] <= NARROW["width"], place.inner_text()
        assert place.evaluate("a => a.contains(document.elementFromPoint("
                              "a.getBoundingClientRect().x + 5, a.getBoundingClientRect().y + 10))")  # fmt: skip


def test_the_table_of_contaminants_keeps_its_words_together_and_shows_that_it_goes_on(chromium):
    page = chromium.new_page(viewport=NARROW)
    page.set_content(TABLE.format(render_to_string("reviews/_impurities.html", {"impurities": {"screened": SCREENED}})))
    for name in ("lab.css", "bench.css"):
        page.add_style_tag(content=(CSS / name).read_text(encoding="utf-8"))
    for cell in page.locator("tbody th, tbody td:not(.num)").all():
        assert cell.evaluate("c => c.clientHeight") <= THREE_LINES_PX, cell.inner_text()
    box = page.locator(".table-scroll")
    assert box.evaluate("b => b.scrollWidth > b.clientWidth")
    assert box.evaluate("b => getComputedStyle(b).backgroundImage").count("gradient") == 4
    page.close()
