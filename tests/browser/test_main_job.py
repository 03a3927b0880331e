"""The whole job in a real browser, on a measured file, through three accounts: a rejection, a revision, an approval.

The sample is the infrared spectrum of liquid 2-propanol "isopropanol_ASDF.jdx" in the open collection inside the source
archive of the PyPI package `jcamp` 1.3.2. Its reference is computed from other people's optical constants of the same
liquid (see prepare.py), so two independent measurements are compared.
"""

from __future__ import annotations

import csv
import io
import json
import re
from pathlib import Path

import pytest
from playwright.sync_api import expect

from tests.browser.live import LiveLaboratory
from tests.browser.people import Person
from tests.cast import WRONG_PASSWORD
from tests.outside import collection_files

SAMPLE_FILE = "infrared_spectra/isopropanol_ASDF.jdx"
LOT = "PR-2207-B"


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("measured") / "isopropanol.jdx"
    path.write_bytes(collection_files()[SAMPLE_FILE])
    return path


def test_a_measured_file_goes_from_upload_to_a_signed_decision(enter, laboratory, measured, tmp_path):
    analyst = enter("analyst")
    registers_a_delivery(analyst, laboratory)
    uploads(analyst, measured, tmp_path)
    reads_the_bench(analyst)
    first_claims(analyst)
    concludes(analyst, "Bands and groups of 2-propanol; nothing else is seen.")
    version_url = signs(analyst)
    is_kept_from_own_work(analyst, version_url)

    reviewer = enter("reviewer")
    takes(reviewer)
    opens_points(reviewer, judge=False)
    rejects(reviewer)

    revises(analyst)
    concludes(analyst, "As 2-propanol. The size difference at 3337 cm-1 is that of another path length.")
    signs(analyst)

    takes(reviewer)
    opens_points(reviewer, judge=True)
    approves(reviewer)

    quality = enter("qa_manager")
    searches_the_trail(quality)
    verifies(quality, "The trail is whole")
    exports(quality)
    assert laboratory.manage("verify_trail").returncode == 0

    notices_a_changed_byte(quality, laboratory)


# The analyst


def registers_a_delivery(analyst: Person, laboratory: LiveLaboratory) -> None:
    page = analyst.page
    page.get_by_role("link", name="Register a delivery").click()
    page.get_by_label("Declared material").first.select_option(str(laboratory.ids["material"]))
    page.get_by_role("button", name="Fill in what its last delivery said").click()
    form = page.locator("form[method=post]").filter(has=page.get_by_label("Supplier's lot"))
    expect(form.get_by_label("Declared material")).to_have_value(str(laboratory.ids["material"]))
    form.get_by_label("Supplier", exact=True).fill("Supplier South")
    form.get_by_label("Supplier's lot").fill(LOT)
    form.get_by_role("button", name="Register, and number the samples").click()
    expect(page.get_by_role("heading", level=1)).to_have_text(re.compile(r"^S-"))


def uploads(analyst: Person, measured: Path, tmp_path: Path) -> None:
    page = analyst.page
    spoilt = tmp_path / "spoilt.jdx"
    # One line of data is lost, as by a broken transfer: the check values of the format must notice.
    lines = measured.read_text(encoding="utf-8").splitlines(keepends=True)
    spoilt.write_text("".join(lines[:60] + lines[61:]), encoding="utf-8")

    analyst.drops("[data-drop]", spoilt)
    expect(page.locator("[data-file-list]")).to_contain_text("spoilt.jdx")
    page.get_by_role("button", name="Upload and analyse").click()
    expect(page.locator(".note-serious")).to_contain_text("spoilt.jdx was refused")

    page.get_by_label("Drop files here, or choose them").set_input_files(measured)
    page.get_by_role("button", name="Upload and analyse").click()
    analyst.sees("was read and stored: decisive spectrum.")
    row = page.locator("tr", has_text="isopropanol.jdx")
    expect(row.locator("progress")).to_be_visible()  # the real worker is at it; the row asks for itself
    expect(row).to_contain_text("analysed", timeout=30_000)

    analyst.drops("[data-drop]", measured)
    page.get_by_role("button", name="Upload and analyse").click()
    expect(page.locator("tr", has_text="replicate")).to_have_count(1)


def reads_the_bench(analyst: Person) -> None:
    page = analyst.page
    page.locator("tr", has_text="isopropanol.jdx").filter(has_text="decisive").get_by_role("link").first.click()
    analyst.waits_for_plot()
    assert analyst.ink() > 2000
    assert page.locator(".lane").count() > 3
    claim = page.locator(".claim[data-group~=alcohol_oh]").first
    claim.hover()
    expect(page.locator(".lane.lit[data-group~=alcohol_oh]")).to_have_count(1)
    assert page.locator(".band-mark.lit").count() >= 1
    assert page.locator(".claim.lit").count() < page.locator(".claim").count()
    page.locator("h1").hover()
    expect(page.locator(".lit")).to_have_count(0)
    for label in ("Transmittance", "Absorbance"):
        page.locator("label", has_text=label).first.click()
        analyst.waits_for_plot()
        assert analyst.ink() > 2000
    page.locator(".overlays label", has_text=re.compile("eference")).first.click()
    expect(page.locator(".stage[aria-busy]")).to_have_count(0)


def first_claims(analyst: Person) -> None:
    page = analyst.page
    claim = page.locator(".claim[data-group~=alcohol_oh]").first
    claim.get_by_role("button", name="Confirm").click()
    expect(claim.locator(".claim-status")).to_contain_text("confirmed by Analyst")

    other = page.locator(".claim", has=page.get_by_role("button", name="Confirm")).last
    mark = other.get_attribute("id")
    other = page.locator(f"#{mark}")
    other.locator("summary", has_text="Change").click()
    verdict = other.get_by_label("Verdict")
    standing = verdict.input_value()
    values = [option.get_attribute("value") for option in verdict.locator("option").all()]
    verdict.select_option(next(value for value in values if value != standing))
    other.get_by_role("button", name="Change the verdict").click()  # the browser asks for the reason
    expect(other.locator(".claim-status")).to_have_count(0)
    # A page without that help reaches the server, which asks for it, too.
    other.get_by_label("Reason, for the reviewer").evaluate("box => box.removeAttribute('required')")
    other.get_by_role("button", name="Change the verdict").click()
    expect(other.locator(".errorlist")).to_be_visible()
    other.get_by_label("Reason, for the reviewer").fill("The window is crowded in a film this thick.")
    other.get_by_role("button", name="Change the verdict").click()
    expect(other.locator(".claim-status")).to_contain_text("changed by Analyst")

    every = page.get_by_role("button", name=re.compile(r"^Confirm the \d+ as expected"))
    if every.count():
        every.click()
        analyst.sees(re.compile(r"confirmed as expected"))
    confirm = page.locator(".claim").get_by_role("button", name="Confirm")
    while left := confirm.count():
        confirm.first.click()
        expect(confirm).to_have_count(left - 1)
    expect(page.locator("#claims-head")).to_contain_text("all looked at")


def concludes(analyst: Person, because: str) -> None:
    page = analyst.page
    page.get_by_label("complies", exact=True).check()
    page.get_by_label("Because").fill(because)
    page.get_by_role("button", name="Save the conclusion").click()
    analyst.sees("The conclusion was saved.")


def signs(analyst: Person) -> str:
    page = analyst.page
    page.get_by_role("link", name="Sign and submit for review").click()
    form = page.locator("form", has=page.get_by_label("Your password"))
    expect(form).to_contain_text("Analyst")
    analyst.sign(form, "Sign and submit", WRONG_PASSWORD)
    expect(form.locator(".errorlist")).to_be_visible()
    analyst.sign(form, "Sign and submit")
    analyst.sees("Signed and submitted.")
    return page.url.removeprefix(analyst.address)


def is_kept_from_own_work(analyst: Person, version_url: str) -> None:
    """They hold the role of a reviewer; what stops them is that it is their own work."""
    page = analyst.page
    analyst.sees(re.compile("You had a hand in this examination"))
    expect(page.get_by_role("button", name="Take into review")).to_have_count(0)
    pk = re.search(r"/interpretations/(\d+)/", version_url)[1]
    status = page.evaluate(
        """async (url) => {
          const token = JSON.parse(document.body.getAttribute("hx-headers"));
          return (await fetch(url, { method: "POST", headers: token })).status;
        }""",
        f"/interpretations/{pk}/take/",
    )
    assert status == 403


def revises(analyst: Person) -> None:
    page = analyst.page
    analyst.open("/today/")
    card = page.locator("section", has=page.get_by_role("heading", name="Sent back"))
    expect(card).to_contain_text("Say where the size differs.")
    card.locator("li", has_text="2-Propanol").get_by_role("link").click()
    page.get_by_role("button", name="Revise").click()
    expect(page.get_by_role("heading", level=1)).to_be_visible()
    analyst.waits_for_plot()
    confirm = page.locator(".claim").get_by_role("button", name="Confirm")
    while left := confirm.count():
        confirm.first.click()
        expect(confirm).to_have_count(left - 1)


# The reviewer


def takes(reviewer: Person) -> None:
    page = reviewer.page
    reviewer.open("/today/")
    card = page.locator("section", has=page.get_by_role("heading", name="Waiting for a second reading"))
    card.locator("li", has_text="2-Propanol").get_by_role("link").click()
    page.get_by_role("button", name="Take into review").click()
    expect(page.locator("#points")).to_be_visible()


def opens_points(reviewer: Person, *, judge: bool) -> None:
    page = reviewer.page
    opening = page.locator("#points").get_by_role("button", name=re.compile("^Open"))
    assert opening.count() > 0
    expect(page.locator("#approve-box [aria-disabled]")).to_be_visible()
    while left := opening.count():
        opening.first.click()
        expect(opening).to_have_count(left - 1)
    if not judge:
        return
    for mark in [point.get_attribute("id") for point in page.locator(".point").all()]:
        point = page.locator(f"#{mark}")
        point.get_by_label(re.compile("^Your comment")).fill("Seen on the plot.")
        point.get_by_role("button", name=re.compile("^Agree")).click()
        expect(point.locator(".point-state")).to_contain_text("agree")


def rejects(reviewer: Person) -> None:
    page = reviewer.page
    page.locator("summary", has_text="Reject with reasons").click()
    form = page.locator("form", has=page.get_by_role("button", name="Sign the rejection"))
    reviewer.sign(form, "Sign the rejection")
    expect(page.locator("#reasons-error")).to_be_visible()
    form.get_by_label("About the whole").fill("Say where the size differs.")
    reviewer.sign(form, "Sign the rejection")
    reviewer.sees(re.compile("is rejected"))


def approves(reviewer: Person) -> None:
    page = reviewer.page
    page.locator("summary", has_text="Approve and sign").click()
    form = page.locator("form", has=page.get_by_role("button", name="Sign the approval"))
    reviewer.sign(form, "Sign the approval", WRONG_PASSWORD)
    form = page.locator("form", has=page.get_by_role("button", name="Sign the approval"))
    expect(form.locator(".errorlist")).to_be_visible()
    reviewer.sign(form, "Sign the approval")
    reviewer.sees("Version 2 is approved.")


# The QA manager


def searches_the_trail(quality: Person) -> None:
    page = quality.page
    quality.open("/trail/")
    page.get_by_label("Text", exact=True).fill("Say where the size differs")
    page.get_by_role("button", name="Search").click()
    row = page.locator("tbody tr", has_text="reject").first
    expect(row).to_contain_text("Reviewer")
    row.get_by_role("link").nth(1).click()  # the life of this record
    life = page.locator("main")
    for word in ("spoilt.jdx", "isopropanol.jdx", "The window is crowded", "another path length"):
        expect(life).to_contain_text(word)


def verifies(quality: Person, heading: str) -> None:
    quality.open("/trail/verify/")
    quality.page.get_by_role("button", name="Verify now").click()
    expect(quality.page.get_by_role("heading", name=heading)).to_be_visible(timeout=30_000)


def exports(quality: Person) -> None:
    page = quality.page
    quality.open("/trail/")
    found = {}
    for kind in ("CSV for a spreadsheet", "JSON for a program"):
        with page.expect_download() as download:
            page.get_by_role("button", name=kind).click()
        found[kind[:3]] = Path(download.value.path()).read_text(encoding="utf-8-sig")
    rows = list(csv.reader(io.StringIO(found["CSV"])))
    assert any(LOT in cell for row in rows for cell in row)
    assert not any(cell.startswith(("=", "+", "@", "\t")) for row in rows for cell in row)
    told = json.dumps(json.loads(found["JSO"]))
    assert "Say where the size differs." in told


def notices_a_changed_byte(quality: Person, laboratory: LiveLaboratory) -> None:
    sha256 = laboratory.rows(
        "SELECT raw.sha256 FROM spectra_rawfile raw JOIN spectra_upload up ON up.raw_file_id = raw.id"
        " WHERE up.file_name = 'isopropanol.jdx'"
    )[0][0]
    path = laboratory.stored_file(sha256)
    before = path.read_bytes()
    path.chmod(0o640)
    path.write_bytes(before[:500] + bytes([before[500] ^ 1]) + before[501:])
    try:
        told = laboratory.manage("verify_trail")
        assert told.returncode == 1
        assert sha256[:12] in told.stderr
        verifies(quality, "The trail is NOT whole")
        expect(quality.page.locator("main")).to_contain_text(sha256[:12])
    finally:
        path.write_bytes(before)
        path.chmod(0o440)
    assert laboratory.manage("verify_trail").returncode == 0
