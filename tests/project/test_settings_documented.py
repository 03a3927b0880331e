"""Every variable that the program reads from its environment is explained in DEVELOPERS.md."""

from __future__ import annotations

import ast
import re
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent.parent
READERS = {"env_text", "env_flag", "env_int"}
OURS = re.compile(r"BANDLEDGER_[A-Z0-9_]+|DATABASE_URL|BROKER_URL")


def variables_in(path: Path) -> set[str]:
    """Names passed to the readers of settings.py, and names of ours that stand as a whole string anywhere."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in READERS and node.args:
            name = node.args[0]
            if isinstance(name, ast.Constant) and isinstance(name.value, str):
                found.add(name.value)
        if isinstance(node, ast.Constant) and isinstance(node.value, str) and OURS.fullmatch(node.value):
            found.add(node.value)
    return found


def variables() -> set[str]:
    paths = [ROOT / "manage.py"]
    for package in ("labsite", "spectra", "reviews"):
        paths += sorted((ROOT / package).rglob("*.py"))
    return set().union(*(variables_in(path) for path in paths if path.exists()))


def test_the_search_finds_them():
    assert {"BANDLEDGER_PRODUCTION", "BANDLEDGER_VAR", "DATABASE_URL", "BROKER_URL"} <= variables()


def test_every_variable_is_explained():
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    assert sorted(name for name in variables() if not re.search(rf"\b{name}\b", text)) == []
