"""The bootstrap: what makes `python3 manage.py ...` work on a machine that has only Python."""

from __future__ import annotations

import ast
import fcntl
import io
import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from labsite import bootstrap

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def tree(tmp_path, monkeypatch):
    """A copy of the files that the bootstrap reads, with the bootstrap pointed at it."""
    for name in (*bootstrap.RUNTIME_FILES, *bootstrap.TEST_FILES):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        shutil.copy(ROOT / name, tmp_path / name)
    monkeypatch.setattr(bootstrap, "ROOT", tmp_path)
    monkeypatch.setattr(bootstrap, "VENV", tmp_path / ".venv")
    return tmp_path


def make_environment(tree: Path, **changes: str) -> dict[str, str]:
    """An environment that looks complete; returns the stamp it would need."""
    venv = tree / ".venv"
    (venv / "bin").mkdir(parents=True)
    (venv / "bin" / "python").symlink_to(sys.executable)
    wanted = bootstrap.wanted_stamp(tree, venv)
    bootstrap.write_stamp(venv, {**wanted, **changes})
    return wanted


def run_python(code: str, *arguments: str, **options) -> subprocess.CompletedProcess:
    return subprocess.run(
        [sys.executable, "-c", code, *arguments], cwd=ROOT, capture_output=True, text=True, timeout=60, **options
    )


# -- refusals ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("version", "system", "words"),
    [
        ((2, 7), "posix", "needs Python 3.11 or newer and this is Python 2.7"),
        ((3, 10), "posix", "needs Python 3.11 or newer and this is Python 3.10"),
        ((3, 13), "nt", "not on Windows"),
    ],
)
def test_an_old_python_or_windows_gets_one_line_with_the_remedy(version, system, words):
    code = (
        "import os, runpy, sys; before = os.name\n"
        f"sys.version_info = {(*version, 0, 'final', 0)}; os.name = {system!r}\n"
        "sys.path.insert(0, '.'); sys.argv = ['manage.py', 'start']\n"
        "runpy.run_path('manage.py', run_name='__main__')"
    )
    done = run_python(code)
    assert done.returncode == 2
    assert words in done.stderr
    assert done.stderr.count("\n") == 1
    assert done.stdout == ""


def test_manage_py_keeps_to_syntax_that_very_old_pythons_read():
    source = (ROOT / "manage.py").read_text(encoding="ascii")
    nodes = list(ast.walk(ast.parse(source, feature_version=(3, 4))))
    assert not [node for node in nodes if isinstance(node, ast.JoinedStr | ast.AnnAssign | ast.NamedExpr)]
    assert not [node for node in nodes if isinstance(node, ast.FunctionDef) and (node.returns or node.args.kwonlyargs)]


@pytest.mark.parametrize("missing", ["venv", "ensurepip"])
def test_a_missing_venv_module_is_named_with_the_package_that_brings_it(tree, monkeypatch, missing):
    real = bootstrap.importlib.util.find_spec
    monkeypatch.setattr(bootstrap.importlib.util, "find_spec", lambda name: None if name == missing else real(name))
    with pytest.raises(bootstrap.Refusal, match=r"apt install python3\.\d+-venv"):
        bootstrap.check_can_build()


def test_a_read_only_folder_is_refused_before_anything_is_made(tree, monkeypatch):
    monkeypatch.setattr(bootstrap.os, "access", lambda path, mode: False)
    with pytest.raises(bootstrap.Refusal, match="is read-only: copy Bandledger to a folder you can write to"):
        bootstrap.check_can_build()


def test_a_python_without_the_packages_is_told_so_when_no_environment_is_wanted():
    code = (
        "import importlib.util, sys; from labsite import bootstrap\n"
        "importlib.util.find_spec = lambda name: None\n"
        "sys.exit(bootstrap.main(['migrate']))"
    )
    done = run_python(code, env={**os.environ, "BANDLEDGER_NO_VENV": "1"})
    assert done.returncode == 2
    assert "lacks django: unset BANDLEDGER_NO_VENV" in done.stderr


def test_wrong_options_of_start_are_refused_before_an_environment_is_built(tmp_path):
    for name in (
        "manage.py",
        "labsite/__init__.py",
        "labsite/bootstrap.py",
        "labsite/start.py",
        "labsite/supervisor.py",
    ):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        shutil.copy(ROOT / name, tmp_path / name)
    clean = {key: value for key, value in os.environ.items() if not key.startswith("BANDLEDGER_")}
    done = subprocess.run(
        [sys.executable, "manage.py", "start", "--port", "70000"],
        cwd=tmp_path, env=clean, capture_output=True, text=True, timeout=60,
    )  # fmt: skip
    assert done.returncode == 2
    assert "use a number from 1 to 65535" in done.stderr
    assert not list(tmp_path.glob(".venv*"))


# -- what counts as up to date ----------------------------------------------------------------------------------


def test_a_complete_environment_is_used_as_it_is(tree):
    wanted = make_environment(tree)
    assert bootstrap.staleness(bootstrap.read_stamp(tree / ".venv"), wanted) is None


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"folder": "/elsewhere/.venv"}, "moved or copied"),
        ({"python": "3.9"}, "made for Python 3.9"),
        ({"runtime": "0" * 64}, "requirements changed"),
    ],
)
def test_a_moved_folder_another_python_and_changed_requirements_are_noticed(tree, change, words):
    wanted = make_environment(tree, **change)
    assert words in bootstrap.staleness(bootstrap.read_stamp(tree / ".venv"), wanted)


@pytest.mark.parametrize("damage", ["no stamp", "half a stamp", "stamp is a list", "python is gone"])
def test_an_environment_that_is_not_complete_is_made_again(tree, damage):
    wanted = make_environment(tree)
    stamp = tree / ".venv" / bootstrap.STAMP_NAME
    if damage == "no stamp":
        stamp.unlink()
    elif damage == "half a stamp":
        stamp.write_text(stamp.read_text()[:20])
    elif damage == "stamp is a list":
        stamp.write_text("[1]")
    else:
        (tree / ".venv/bin/python").unlink()
        (tree / ".venv/bin/python").symlink_to(tree / "no-such-python")
    assert "not complete" in bootstrap.staleness(bootstrap.read_stamp(tree / ".venv"), wanted)


def test_the_digest_changes_when_bytes_move_from_one_file_to_the_next(tmp_path):
    (tmp_path / "a").write_text("xy")
    (tmp_path / "b").write_text("z")
    before = bootstrap.digest_of(tmp_path, ("a", "b"))
    (tmp_path / "a").write_text("x")
    (tmp_path / "b").write_text("yz")
    assert bootstrap.digest_of(tmp_path, ("a", "b")) != before


# -- building ---------------------------------------------------------------------------------------------------


def test_a_failed_build_leaves_nothing_behind_and_the_old_environment_in_place(tree, monkeypatch):
    make_environment(tree, runtime="old")
    monkeypatch.setattr(bootstrap, "run_quietly", lambda command, complaint: Path(command[-1]).mkdir())

    def no_network(python, lock):
        raise bootstrap.Refusal("no network")

    monkeypatch.setattr(bootstrap, "install", no_network)
    with pytest.raises(bootstrap.Refusal, match="no network"), bootstrap.prepared_environment(with_tests=False):
        pass
    assert json.loads((tree / ".venv" / bootstrap.STAMP_NAME).read_text())["runtime"] == "old"
    assert not list(tree.glob(".venv.new-*"))


def test_the_environment_is_renamed_into_place_with_its_scripts_pointing_there(tree, monkeypatch):
    def make(command, complaint):
        fresh = Path(command[-1])
        (fresh / "bin").mkdir(parents=True)
        (fresh / "bin" / "python").symlink_to(sys.executable)
        (fresh / "bin" / "tool").write_text(f"#!{fresh}/bin/python\nprint(1)\n")
        (fresh / "bin" / "binary").write_bytes(b"\x7fELF\0" + os.fsencode(fresh))

    monkeypatch.setattr(bootstrap, "run_quietly", make)
    monkeypatch.setattr(bootstrap, "install", lambda python, lock: None)
    (tree / ".venv.new-1").mkdir()  # what an interrupted build left
    with bootstrap.prepared_environment(with_tests=True):
        assert (tree / ".venv/bin/tool").read_text().startswith(f"#!{tree}/.venv/bin/python")
        assert b".venv.new-" in (tree / ".venv/bin/binary").read_bytes()
        assert bootstrap.read_stamp(tree / ".venv") == bootstrap.wanted_stamp(tree, tree / ".venv")
    assert not list(tree.glob(".venv.new-*"))


def test_what_the_tests_need_is_added_only_for_the_tests(tree, monkeypatch):
    wanted = make_environment(tree, tests="")
    installed = []
    monkeypatch.setattr(bootstrap, "install", lambda python, lock: installed.append(lock.name))
    with bootstrap.prepared_environment(with_tests=False):
        assert installed == []
    with bootstrap.prepared_environment(with_tests=True):
        assert installed == ["requirements.lock"]
    assert bootstrap.read_stamp(tree / ".venv") == wanted


def test_nothing_is_rebuilt_under_a_running_command(tree, monkeypatch):
    make_environment(tree, runtime="old")
    monkeypatch.setattr(bootstrap, "IN_USE_PATIENCE_SECONDS", 0.2)
    with open(tree / ".venv.use", "w") as running:
        fcntl.flock(running, fcntl.LOCK_SH)
        with pytest.raises(bootstrap.Refusal, match="a running command uses it"):  # noqa: SIM117
            with bootstrap.prepared_environment(with_tests=False):
                pass


def test_two_first_starts_build_once(tree):
    code = """
import os, sys, time
from pathlib import Path
from labsite import bootstrap
bootstrap.ROOT = Path(sys.argv[1]); bootstrap.VENV = bootstrap.ROOT / ".venv"

def build(venv, wanted, reason):
    with open(bootstrap.ROOT / "built", "a") as log:
        log.write("once\\n")
    time.sleep(0.5)
    (venv / "bin").mkdir(parents=True)
    (venv / "bin" / "python").symlink_to(sys.executable)
    bootstrap.write_stamp(venv, wanted)

bootstrap.build = build
with bootstrap.prepared_environment(with_tests=False):
    assert bootstrap.read_stamp(bootstrap.VENV)
"""
    starts = [
        subprocess.Popen([sys.executable, "-c", code, str(tree)], cwd=ROOT, stderr=subprocess.PIPE, text=True)
        for _ in range(3)
    ]
    complaints = [start.communicate(timeout=60)[1] for start in starts]
    assert [start.returncode for start in starts] == [0, 0, 0], complaints
    assert (tree / "built").read_text() == "once\n"
    assert sum("waiting for it" in text for text in complaints) == 2


def test_progress_counts_packages_and_is_brief_where_nobody_watches():
    stream = io.StringIO()
    progress = bootstrap.Progress(45, stream)
    for number in range(1, 13):
        progress.see(f"Collecting package{number}==1.0 (from -r requirements.lock (line 1))\n")
        progress.see("  Downloading package.whl\n")
    progress.see("Installing collected packages: a, b\n")
    progress.end()
    assert stream.getvalue().splitlines() == [
        "  1 of 45 packages: package1==1.0",
        "  11 of 45 packages: package11==1.0",
        "  installing them",
    ]


# -- the child --------------------------------------------------------------------------------------------------


def test_the_childs_exit_code_is_passed_on():
    assert bootstrap.run_child([sys.executable, "-c", "raise SystemExit(7)"]) == 7
    assert bootstrap.run_child([sys.executable, "-c", "import os; os.kill(os.getpid(), 9)"]) == 128 + 9


def test_the_child_sees_neither_pythonpath_nor_where_pip_was_told_to_install(monkeypatch):
    monkeypatch.setenv("PYTHONPATH", "/somewhere")
    monkeypatch.setenv("PIP_TARGET", "/somewhere")
    monkeypatch.setenv("PIP_INDEX_URL", "https://packages.example")
    environment = bootstrap.clean_environment()
    assert "PYTHONPATH" not in environment
    assert "PIP_TARGET" not in environment
    assert environment["PIP_INDEX_URL"] == "https://packages.example"


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_to_the_bootstrap_reaches_the_child(tmp_path, number):
    child = (
        "import signal, sys, time\n"
        f"signal.signal({int(number)}, lambda *_: sys.exit(5))\n"
        "open(sys.argv[1], 'w').close(); time.sleep(30)"
    )
    code = (
        "import sys; from labsite import bootstrap\n"
        "sys.exit(bootstrap.run_child([sys.executable, '-c', *sys.argv[1:]]))"
    )
    ready = tmp_path / "ready"
    parent = subprocess.Popen([sys.executable, "-c", code, child, str(ready)], cwd=ROOT, start_new_session=True)
    deadline = time.monotonic() + 20
    while not ready.exists() and time.monotonic() < deadline:
        time.sleep(0.02)
    parent.send_signal(number)
    assert parent.wait(timeout=20) == 5


# -- promises about the files -----------------------------------------------------------------------------------


def test_bootstrap_start_and_supervisor_need_nothing_but_the_standard_library():
    code = (
        "import sys; import labsite.bootstrap, labsite.start\n"
        "print(sorted({name.partition('.')[0] for name in sys.modules} - sys.stdlib_module_names))"
    )
    done = subprocess.run([sys.executable, "-I", "-S", "-c", f"import sys; sys.path.insert(0, {str(ROOT)!r})\n{code}"],
                          capture_output=True, text=True, timeout=60)  # fmt: skip
    assert done.stdout.strip() == "['__main__', 'labsite']" or done.stdout.strip() == "['labsite']", done.stderr


def pins(name: str) -> dict[str, str]:
    found = re.findall(r"^([A-Za-z0-9._-]+)(?:\[[a-z]+\])?==([^\s;\\]+)", (ROOT / name).read_text(), re.MULTILINE)
    return {package.lower().replace("_", "-"): version for package, version in found}


def test_every_requirement_is_pinned_and_locked_at_that_version():
    for direct, locked in (bootstrap.RUNTIME_FILES, bootstrap.TEST_FILES):
        lines = [line for line in (ROOT / direct).read_text().splitlines() if line and line[0] not in "#-"]
        assert len(lines) == len(pins(direct))
        assert pins(direct).items() <= pins(locked).items()


def test_both_locks_agree_carry_hashes_and_name_no_address():
    runtime, tests = pins("labsite/requirements.lock"), pins("tests/requirements.lock")
    assert runtime.items() <= tests.items()
    for name in ("labsite/requirements.lock", "tests/requirements.lock"):
        text = (ROOT / name).read_text()
        assert "://" not in text
        assert text.count("==") <= text.count("--hash=sha256:")
