"""Every page of the work fits a screen 390 px wide, and the bench can be used without a mouse."""

from __future__ import annotations

import re

import pytest
from playwright.sync_api import expect

from tests.browser.people import Person

NARROW = {"width": 390, "height": 844}


def pages(ids: dict[str, int]) -> dict[str, tuple[str, str]]:
    """Who looks at which page, by its name."""
    return {
        "Today": ("analyst", "/today/"),
        "Delivery": ("analyst", f"/deliveries/{ids['draft_delivery']}/"),
        "Sample": ("analyst", f"/samples/{ids['draft_sample']}/"),
        "Bench": ("analyst", f"/spectra/{ids['draft_spectrum']}/bench/"),
        "Review": ("reviewer", f"/interpretations/{ids['taken']}/review/"),
        "Trail": ("qa_manager", "/trail/"),
    }


@pytest.mark.parametrize("name", ["Today", "Delivery", "Sample", "Bench", "Review", "Trail"])
def test_a_page_needs_no_scrolling_to_the_side_on_a_small_screen(enter, laboratory, name):
    who, path = pages(laboratory.ids)[name]
    person = enter(who, **NARROW)
    person.open(path)
    if name in ("Bench", "Review"):
        person.waits_for_plot()
        assert person.ink() > 500
    assert person.overflow_px() <= 0
    for summary in person.page.locator("main summary").all():  # what opens must fit, too
        if summary.is_visible() and not summary.evaluate("mark => mark.parentElement.open"):
            summary.click()
    assert person.overflow_px() <= 0


def focus_by_tab(person: Person, selector: str, *, at_most: int = 200) -> None:
    """Press Tab until an element that fits `selector` has the focus."""
    for _ in range(at_most):
        person.page.keyboard.press("Tab")
        if person.page.evaluate("wanted => document.activeElement.matches(wanted)", selector):
            return
    raise AssertionError(f"no way by Tab to {selector}")


def test_the_bench_is_used_by_keyboard(enter, laboratory):
    person = enter("analyst")
    person.open(f"/spectra/{laboratory.ids['draft_spectrum']}/bench/")
    person.waits_for_plot()
    page = person.page

    focus_by_tab(person, ".plot-area")
    before = page.locator(".band-mark:not([hidden])").count()
    page.keyboard.press("+")
    page.keyboard.press("+")
    expect(page.locator(".band-mark[hidden]").first).to_be_attached()  # some bands lie outside the view now
    page.keyboard.press("0")
    expect(page.locator(".band-mark:not([hidden])")).to_have_count(before)

    focus_by_tab(person, ".band-mark")
    first = page.evaluate("() => document.activeElement.dataset.band")
    page.keyboard.press("ArrowRight")
    assert float(page.evaluate("() => document.activeElement.dataset.band")) < float(first)

    focus_by_tab(person, ".claim[data-group]:not([data-group='']) .link-key")
    page.keyboard.press("Enter")
    kept = page.locator(".link-key[aria-pressed=true]")
    expect(kept).to_have_count(1)
    expect(page.locator(".plot-said")).to_contain_text("Kept:")
    page.keyboard.press("Tab")
    page.keyboard.press("Escape")
    expect(kept).to_have_count(0)
    expect(page.locator(".plot-said")).to_have_text("")

    focus_by_tab(person, ".claim form[action$='/confirm/'] button")
    mark = page.evaluate("() => document.activeElement.closest('.claim').id")
    page.keyboard.press("Enter")
    claim = page.locator(f"#{mark}")
    expect(claim.locator(".claim-status")).to_contain_text("confirmed by Analyst")
    # The focus stays at the claim that was answered, not at the top of the page.
    page.wait_for_function("mark => document.activeElement.closest('.claim')?.id === mark", arg=mark)


def test_the_way_past_the_navigation_is_the_first_stop(enter, laboratory):
    person = enter("analyst")
    person.open("/today/")
    person.page.keyboard.press("Tab")
    expect(person.page.locator(".skip-link")).to_be_focused()
    person.page.keyboard.press("Enter")
    expect(person.page).to_have_url(re.compile("#main$"))


def test_a_page_prints_without_its_buttons(enter, laboratory):
    person = enter("analyst")
    person.open(f"/spectra/{laboratory.ids['draft_spectrum']}/bench/")
    person.waits_for_plot()
    person.page.emulate_media(media="print")
    expect(person.page.locator(".bands, table").first).to_be_visible()
    for part in person.page.locator(".no-print").all():
        expect(part).to_be_hidden()
