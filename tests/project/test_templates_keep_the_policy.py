"""The sources of every page, read without running them: nothing inline, nothing from outside, no script in a plot."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from django.conf import settings

ROOT = Path(settings.BASE_DIR)
APPS = ("labsite", "spectra", "reviews")
TEMPLATES = sorted(path for app in APPS for path in (ROOT / app).rglob("templates/**/*.html"))
STATIC = sorted(path for path in (ROOT / "labsite" / "static").rglob("*") if path.suffix in (".js", ".css", ".svg"))
OWN_SCRIPTS = [path for path in STATIC if path.suffix == ".js" and "vendor" not in path.parts]
PYTHON = sorted(path for app in APPS for path in (ROOT / app).rglob("*.py") if "migrations" not in path.parts)

COMMENT = re.compile(r"\{% comment %\}.*?\{% endcomment %\}|\{#.*?#\}", re.DOTALL)
INLINE = {
    "a script without a file": re.compile(r"<script(?![^>]*\bsrc=)", re.IGNORECASE),
    "a style element": re.compile(r"<style\b", re.IGNORECASE),
    "a style attribute": re.compile(r"<[^>]*\sstyle\s*=", re.IGNORECASE),
    "an event attribute": re.compile(r"<[^>]*\son[a-z]+\s*=", re.IGNORECASE),
    "script of the page's own in htmx": re.compile(r"\bhx-on|hx-(?:vals|headers)\s*=\s*[\"']js:|hx-ext", re.IGNORECASE),
    "a javascript address": re.compile(r"javascript:", re.IGNORECASE),
    "an address outside": re.compile(r"(?:src|href|action|hx-[a-z]+)\s*=\s*[\"']\s*(?:https?:)?//", re.IGNORECASE),
    "a frame or plugin": re.compile(r"<(?:iframe|object|embed|applet)\b", re.IGNORECASE),
}


def found(text: str) -> list[str]:
    return [what for what, pattern in INLINE.items() if pattern.search(text)]


def named(path: Path) -> str:
    return str(path.relative_to(ROOT))


@pytest.mark.parametrize("path", TEMPLATES, ids=named)
def test_a_template_holds_nothing_that_the_policy_refuses(path):
    assert not found(COMMENT.sub("", path.read_text(encoding="utf-8")))


@pytest.mark.parametrize(
    "text",
    [
        "<script>run()</script>",
        "<STYLE>p {}</STYLE>",
        '<p class="a" style="color: red">',
        '<button type="button" onclick="run()">',
        '<div hx-on:click="run()">',
        "<div hx-vals='js:{a: 1}'>",
        '<a href="javascript:run()">',
        '<script src="https://outside.example/a.js"></script>',
        '<img src="//outside.example/a.png">',
        "<iframe src='/x'></iframe>",
    ],
)
def test_the_scan_notices_what_it_is_for(text):
    assert found(text)


def test_there_are_templates_to_look_at():
    assert len(TEMPLATES) > 40


@pytest.mark.parametrize("path", STATIC, ids=named)
def test_a_static_file_loads_nothing_from_outside(path):
    text = path.read_text(encoding="utf-8")
    assert not re.search(r"@import|url\(\s*[\"']?\s*(?:https?:)?//", text)
    if path.suffix == ".js":
        assert not re.search(r"(?:fetch|import|importScripts|open)\(\s*[\"'`](?:https?:)?//", text)


@pytest.mark.parametrize("path", OWN_SCRIPTS, ids=named)
def test_an_own_script_runs_no_text_as_code_and_writes_no_markup(path):
    text = path.read_text(encoding="utf-8")
    for wrong in (r"\beval\(", r"new Function\(", r"\.innerHTML\b", r"\.outerHTML\b", r"document\.write"):
        assert not re.search(wrong, text), wrong


@pytest.mark.parametrize("path", PYTHON, ids=named)
def test_no_plot_carries_script_of_its_own(path):
    """CustomJS needs eval, which the policy refuses: the plot would stay empty."""
    text = path.read_text(encoding="utf-8")
    for wrong in ("CustomJS", "CustomJSTickFormatter", "CustomJSHover", "CustomJSFilter", "bokeh.resources", "CDN"):
        assert not re.search(rf"\b{re.escape(wrong)}\b", text), wrong


def test_the_plots_are_made_as_json_and_not_as_a_page():
    text = (ROOT / "spectra" / "plots.py").read_text(encoding="utf-8")
    assert "json_item" in text
    assert not re.search(r"\bcomponents\(|\bfile_html\(|\bserver_document\(", text)


def test_markup_is_marked_safe_only_where_it_is_built_from_escaped_parts():
    """`|safe` and `autoescape off` let text from a file header become markup."""
    for path in TEMPLATES:
        text = COMMENT.sub("", path.read_text(encoding="utf-8"))
        assert not re.search(r"\|\s*safe\b|autoescape\s+off|\|\s*safeseq\b", text), named(path)
