"""A person at a browser: what they do with a page, and what the browser complains about meanwhile."""

from __future__ import annotations

import re
from pathlib import Path

from playwright.sync_api import BrowserContext, Locator, expect

from tests.cast import PASSWORD

# Pixels of the plot that are neither transparent nor white, in every canvas, shadow trees included.
INK = """() => {
  const canvases = [];
  const look = (node) => node.querySelectorAll("*").forEach((element) => {
    if (element.tagName === "CANVAS") canvases.push(element);
    if (element.shadowRoot) look(element.shadowRoot);
  });
  look(document.querySelector(".plot-canvas"));
  let ink = 0;
  canvases.filter((canvas) => canvas.width && canvas.height).forEach((canvas) => {
    const { data } = canvas.getContext("2d").getImageData(0, 0, canvas.width, canvas.height);
    for (let i = 0; i < data.length; i += 4) {
      if (data[i + 3] > 40 && data[i] + data[i + 1] + data[i + 2] < 600) ink += 1;
    }
  });
  return ink;
}"""
# How far the page, or any part that is not in a box that scrolls by itself, reaches over the right edge.
OVERFLOW = """() => {
  const width = document.documentElement.clientWidth;
  const boxed = (element) => {
    for (let box = element.parentElement; box && box !== document.body; box = box.parentElement) {
      if (getComputedStyle(box).overflowX !== "visible") return true;
    }
    return false;
  };
  let over = document.documentElement.scrollWidth - width;
  document.querySelectorAll("body *").forEach((element) => {
    const { right, width: wide, height } = element.getBoundingClientRect();
    if (wide > 1 && height > 1 && right - width > over && !boxed(element)) over = right - width;
  });
  return Math.round(over);
}"""


class Person:
    """Holds one browser context. `complaints` collects errors of scripts and violations of the content policy."""

    def __init__(self, context: BrowserContext, address: str, username: str) -> None:
        self.context, self.address, self.username = context, address, username
        context.set_default_timeout(15_000)
        self.page = context.new_page()
        self.complaints: list[str] = []
        self.page.on("console", self._listen)
        self.page.on("pageerror", lambda error: self.complaints.append(f"script error: {error}"))
        self.page.on("request", self._watch)

    def _listen(self, message) -> None:
        # A refused form is answered with 4xx, which the browser notes as an error of loading.
        answered = re.match(r"Failed to load resource: the server responded with a status of 4", message.text)
        if message.type == "error" and not answered:
            self.complaints.append(f"{message.type}: {message.text}")

    def _watch(self, request) -> None:
        if not request.url.startswith((self.address, "data:", "blob:")):
            self.complaints.append(f"asked outside: {request.url}")

    def open(self, path: str) -> None:
        answer = self.page.goto(self.address + path)
        assert answer is not None and answer.ok, f"{path}: {answer and answer.status}"

    def sign_in(self) -> None:
        self.open("/sign-in/")
        self.page.get_by_label("User name").fill(self.username)
        self.page.get_by_label("Password").fill(PASSWORD)
        self.page.get_by_role("button", name="Sign in").click()
        expect(self.page.get_by_role("heading", name="Today")).to_be_visible()

    def sign(self, scope: Locator, button: str, password: str = PASSWORD) -> None:
        """Type the password in the part of a page that asks for it, and press its button."""
        scope.get_by_label("Your password").fill(password)
        scope.get_by_role("button", name=button).click()

    def sees(self, text: str | re.Pattern) -> None:
        expect(self.page.get_by_text(text).first).to_be_visible()

    def waits_for_plot(self) -> None:
        expect(self.page.locator(".plot-wait")).to_be_hidden()
        expect(self.page.locator(".lanes-laid")).to_have_count(1)

    def ink(self) -> int:
        return self.page.evaluate(INK)

    def overflow_px(self) -> int:
        return self.page.evaluate(OVERFLOW)

    def drops(self, target: str, path: Path) -> None:
        """Drag a file over an element and let it go there."""
        transfer = self.page.evaluate_handle(
            """([text, name]) => {
              const transfer = new DataTransfer();
              transfer.items.add(new File([text], name));
              return transfer;
            }""",
            [path.read_text(encoding="utf-8"), path.name],
        )
        for kind in ("dragenter", "dragover", "drop"):
            self.page.dispatch_event(target, kind, {"dataTransfer": transfer})
