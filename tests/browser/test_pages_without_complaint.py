"""Each role opens every page that its navigation leads to, and goes one step further; the browser does not complain.

It would complain of an error in a script, of anything that the content policy refuses, or that comes from outside.
"""

from __future__ import annotations

import pytest
from playwright.sync_api import expect

STEPS_FURTHER = 4  # links followed from each page of the navigation, each kind of address once


def kind_of(path: str) -> str:
    """An address without its numbers."""
    return "/".join("#" if part.isdigit() or len(part) == 64 else part for part in path.split("/"))


@pytest.mark.parametrize("username", ["analyst", "reviewer", "qa_manager", "method_owner", "administrator"])
def test_the_pages_of_a_role_load_clean(enter, username):
    person = enter(username)
    page = person.page
    seen: set[str] = set()

    def links(within: str) -> list[str]:
        anchors = page.locator(f"{within} a[href^='/']")
        found = anchors.evaluate_all("all => all.map((link) => link.getAttribute('href'))")
        return [path.partition("#")[0] for path in found if "/raw/" not in path and path != "/"]

    for path in links(".top-nav"):
        person.open(path)
        seen.add(kind_of(path))
        further = {kind_of(other): other for other in links("main")}
        for kind, other in list(further.items())[:STEPS_FURTHER]:
            if kind in seen:
                continue
            seen.add(kind)
            person.open(other)
            expect(page.get_by_role("heading", level=1)).to_be_visible()
            if page.locator(".stage").count():
                person.waits_for_plot()
    assert len(seen) > 3
    assert not person.complaints
