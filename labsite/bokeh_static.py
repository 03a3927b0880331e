"""Serves the plotting library's one script from the installed package, never from outside."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from importlib.util import find_spec
from pathlib import Path

from django.contrib.staticfiles.finders import BaseFinder
from django.core.files.storage import FileSystemStorage, Storage

SCRIPT = "bokeh.min.js"
PREFIX = "bokeh"


class BokehFinder(BaseFinder):
    """Finds `bokeh/bokeh.min.js`; the package's other scripts stay where they are."""

    def __init__(self, app_names: object = None, *args: object, **kwargs: object):
        # Looking for the package does not import it, which takes more than a second.
        package = Path(find_spec("bokeh").origin).parent
        self.storage = FileSystemStorage(location=package / "server" / "static" / "js")
        self.storage.prefix = PREFIX

    def find(self, path: str, find_all: bool = False, **kwargs: object) -> str | list[str]:
        if path != f"{PREFIX}/{SCRIPT}":
            return []
        found = self.storage.path(SCRIPT)
        return [found] if find_all else found

    def list(self, ignore_patterns: Iterable[str]) -> Iterator[tuple[str, Storage]]:
        yield SCRIPT, self.storage
