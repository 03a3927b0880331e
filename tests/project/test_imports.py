"""Imports point one way, and writing happens where it should. Read from the source, function bodies included."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from functools import cache
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent.parent
PROJECT = ("labsite", "spectra", "reviews")
CORE = "spectra.core"

# The core calculates: it knows no clock, no files, no network, no settings.
CORE_LIBRARIES = {"numpy", "scipy", "pybaselines", "rdkit", "rfc8785"}
CORE_NEVER = {
    "asyncio",
    "datetime",
    "glob",
    "http",
    "logging",
    "multiprocessing",
    "os",
    "pathlib",
    "random",
    "secrets",
    "shutil",
    "socket",
    "sqlite3",
    "subprocess",
    "tempfile",
    "threading",
    "time",
    "urllib",
    "uuid",
}
# Modules that must be usable without a configured Django.
PURE = {
    "labsite.errors",
    "labsite.trail.canonical",
    "labsite.trail.chain",
    "labsite.trail.columns",
    "labsite.trail.context",
    "labsite.trail.events",
    "labsite.trail.merkle",
    "labsite.signing.digest",
    "reviews.transitions",
}
# What a rule allows to one module, each with its reason.
ALLOWED = {
    ("reviews.demonstration", "fixtures"): "the demonstration's scenario is data, and this module loads it",
}
WRITING_CALLS = {
    "abulk_create",
    "acreate",
    "asave",
    "bulk_create",
    "bulk_update",
    "create",
    "delete",
    "get_or_create",
    "save",
    "update_or_create",
}
WRITING_NAMES = {"transaction", "unit_of_work", "record"}
TRAIL_MODELS = {"TrailEntry", "TrailPersonal", "TrailHead"}


@cache
def sources() -> dict[str, ast.Module]:
    """Every module of the project by its dotted name."""
    found = {}
    for package in PROJECT:
        for path in sorted((ROOT / package).rglob("*.py")):
            if "migrations" in path.parts:
                continue
            parts = path.relative_to(ROOT).with_suffix("").parts
            name = ".".join(parts[:-1] if parts[-1] == "__init__" else parts)
            found[name] = ast.parse(path.read_text(encoding="utf-8"), filename=str(path))
    return found


def is_package(module: str) -> bool:
    return (ROOT / module.replace(".", "/") / "__init__.py").exists()


def imports(module: str) -> Iterator[tuple[str, int]]:
    """(dotted name of what is imported, line), relative imports resolved, also from inside functions."""
    for node in ast.walk(sources()[module]):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node.lineno
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                parts = module.split(".")
                kept = len(parts) - node.level + (1 if is_package(module) else 0)
                base = ".".join([*parts[:kept], *([base] if base else [])])
            yield base, node.lineno
            for alias in node.names:
                yield f"{base}.{alias.name}", node.lineno


def inside(name: str, package: str) -> bool:
    return name == package or name.startswith(f"{package}.")


def offences(modules: Iterator[str], forbidden) -> list[str]:
    return sorted(
        {
            f"{module}:{line} imports {name}"
            for module in modules
            for name, line in imports(module)
            if forbidden(name) and (module, name.partition(".")[0]) not in ALLOWED
        }
    )


def modules(test) -> Iterator[str]:
    chosen = [module for module in sources() if test(module)]
    assert chosen, "the rule found no module to look at"
    return iter(chosen)


def test_the_walk_sees_the_project():
    assert len(sources()) > 40
    assert {"labsite.trail.record", "spectra", "reviews", CORE} <= set(sources())


def test_every_exception_is_still_needed():
    assert {
        (module, name) for module, name in ALLOWED if any(inside(found, name) for found, _ in imports(module))
    } == set(ALLOWED)


def test_labsite_imports_neither_spectra_nor_reviews():
    assert (
        offences(
            modules(lambda m: inside(m, "labsite")), lambda name: inside(name, "spectra") or inside(name, "reviews")
        )
        == []
    )


def test_spectra_does_not_import_reviews():
    assert offences(modules(lambda m: inside(m, "spectra")), lambda name: inside(name, "reviews")) == []


def test_nobody_imports_tests_or_fixtures():
    assert offences(modules(lambda m: True), lambda name: inside(name, "tests") or inside(name, "fixtures")) == []


def test_the_core_imports_itself_and_numeric_libraries_only():
    def forbidden(name: str) -> bool:
        if inside(name, CORE) or name == "__future__":
            return False
        top = name.partition(".")[0]
        return top in CORE_NEVER or (top not in sys.stdlib_module_names and top not in CORE_LIBRARIES)

    assert offences(modules(lambda m: inside(m, CORE)), forbidden) == []


def test_the_core_opens_no_file():
    opened = [
        f"{module}:{node.lineno}"
        for module in modules(lambda m: inside(m, CORE))
        for node in ast.walk(sources()[module])
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in ("open", "print", "input")
    ]
    assert opened == []


@pytest.mark.parametrize("module", sorted(PURE))
def test_a_pure_module_imports_no_django(module):
    assert offences(iter([module]), lambda name: inside(name, "django")) == []


def test_importing_the_core_brings_in_no_web_and_no_plotting():
    program = (
        "import importlib, pkgutil, sys, spectra.core as core\n"
        "for found in pkgutil.walk_packages(core.__path__, 'spectra.core.'):\n"
        "    importlib.import_module(found.name)\n"
        "tops = {name.partition('.')[0] for name in sys.modules}\n"
        "heavy = {'django', 'celery', 'bokeh', 'labsite', 'reviews'} & tops\n"
        "slow = {'rdkit', 'scipy.optimize', 'pybaselines'} & set(sys.modules)\n"
        "print(sorted(heavy), sorted(slow))\n"
    )
    ran = subprocess.run([sys.executable, "-c", program], cwd=ROOT, capture_output=True, text=True, timeout=120)
    assert (ran.returncode, ran.stdout.strip()) == (0, "[] []"), ran.stderr


def _is_view(module: str) -> bool:
    return "views" in module.split(".")[1:] or module.endswith((".api", ".views"))


def _is_task(module: str) -> bool:
    return module.split(".")[-1] == "tasks"


def test_views_and_tasks_write_nothing_themselves():
    found = []
    for module in modules(lambda m: _is_view(m) or _is_task(m)):
        for node in ast.walk(sources()[module]):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute) and node.func.attr in WRITING_CALLS:
                found.append(f"{module}:{node.lineno} calls .{node.func.attr}()")
            if isinstance(node, ast.ImportFrom):
                names = {alias.name for alias in node.names} & WRITING_NAMES
                found += [f"{module}:{node.lineno} imports {name}" for name in names]
    assert found == []


def test_models_import_nothing_that_stands_above_them():
    above = {"services", "selectors", "views", "forms", "tasks", "queue", "api", "plots"}

    def forbidden(name: str) -> bool:
        return name.partition(".")[0] in PROJECT and not above.isdisjoint(name.split("."))

    assert offences(modules(lambda m: "models" in m.split(".")), forbidden) == []


def test_only_the_trails_one_writer_makes_entries():
    found = []
    for module in modules(lambda m: m != "labsite.trail.record"):
        for node in ast.walk(sources()[module]):
            if not isinstance(node, ast.Call):
                continue
            called = node.func
            if isinstance(called, ast.Name) and called.id in TRAIL_MODELS:
                found.append(f"{module}:{node.lineno} makes a {called.id}")
            if isinstance(called, ast.Attribute) and called.attr in WRITING_CALLS | {"update"}:
                names = {part.id for part in ast.walk(called) if isinstance(part, ast.Name)}
                found += [f"{module}:{node.lineno} writes {name}" for name in names & TRAIL_MODELS]
    assert found == []


def test_no_other_part_names_the_trails_tables_in_sql():
    found = []
    for module in modules(lambda m: not inside(m, "labsite.trail")):
        for node in ast.walk(sources()[module]):
            if isinstance(node, ast.Constant) and isinstance(node.value, str) and "trail_trail" in node.value:
                found.append(f"{module}:{node.lineno}")
    assert found == []
