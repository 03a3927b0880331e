"""Make `.venv` when it is missing or stale, then run the command inside it as a child process.

Standard library only: this runs before anything is installed. The environment is built in a temporary folder and
renamed when it is complete; its stamp is written last and names the Python, the folder and the requirements it was
built for, so an interrupted build, another Python, changed requirements or a moved folder are all noticed.

Two files lie beside it. `.venv.lock` is held while building, so that two first starts do not build twice.
`.venv.use` is held shared by every running command, so that nothing is rebuilt under a running server.
"""

from __future__ import annotations

import fcntl
import hashlib
import importlib.util
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
VENV = ROOT / ".venv"
RUNTIME_FILES = ("requirements.txt", "labsite/requirements.lock")
TEST_FILES = ("tests/requirements.txt", "tests/requirements.lock")
STAMP_NAME = "bandledger-stamp.json"
IN_USE_PATIENCE_SECONDS = 3.0

# These would send packages or imports somewhere else than the environment being built.
DROPPED_VARIABLES = (
    "PYTHONPATH",
    "PYTHONHOME",
    "PIP_TARGET",
    "PIP_PREFIX",
    "PIP_USER",
    "PIP_ROOT",
    "__PYVENV_LAUNCHER__",
)

USAGE = """Bandledger's own commands:
  start      prepare everything and serve the demonstration laboratory (start --help for options)
  test       run the whole test suite (arguments go to pytest)
  examine    read spectrum files from the shell, outside the record
Any command but start works on your own laboratory; with --demo it works on the demonstration, for example:
  verify_trail --demo
All others:
"""


class Refusal(Exception):
    """One clear line for the person at the terminal, with the remedy in it."""


def say(line: str) -> None:
    print(line, file=sys.stderr, flush=True)


def main(arguments: Sequence[str]) -> int:
    """Run `manage.py ARGUMENTS`; return its exit code. 2 when it could not be run at all."""
    try:
        if os.environ.get("BANDLEDGER_NO_VENV") == "1" or runs_inside(VENV):
            return run_here(list(arguments))
        if arguments[:1] == ["start"]:
            from labsite import start

            start.check_before_building(arguments[1:], environment_is_there=VENV.exists())
        with_tests = arguments[:1] == ["test"]
        with prepared_environment(with_tests) as lock:
            return run_child([str(VENV / "bin" / "python"), str(ROOT / "manage.py"), *arguments], keep_open=lock)
    except Refusal as refusal:
        say(str(refusal))
        return 2
    except KeyboardInterrupt:
        return 130


# -- inside the environment -------------------------------------------------------------------------------------


def runs_inside(venv: Path) -> bool:
    """Whether this interpreter is the environment's own, started by a bootstrap that had checked it."""
    return os.environ.get("BANDLEDGER_BOOTSTRAPPED") == "1" and Path(sys.prefix).resolve() == venv.resolve()


def run_here(arguments: list[str]) -> int:
    if str(ROOT) not in sys.path:
        sys.path.insert(0, str(ROOT))
    os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labsite.settings")
    needed = "pytest" if arguments[:1] == ["test"] else "django"
    if importlib.util.find_spec(needed) is None:
        raise Refusal(f"This Python lacks {needed}: unset BANDLEDGER_NO_VENV, or install the requirements into it.")
    if arguments[:1] == ["start"]:
        from labsite import start

        return start.main(arguments[1:])
    if arguments[:1] == ["test"]:
        os.chdir(ROOT)
        return run_child([sys.executable, "-m", "pytest", *arguments[1:]])
    from django.core.management import execute_from_command_line

    if arguments in ([], ["help"], ["--help"]):
        print(USAGE, flush=True)
    if "--demo" in arguments[1:]:
        arguments = [argument for argument in arguments if argument != "--demo"]
        os.environ["BANDLEDGER_DEMO"] = "1"  # before the settings are read
    try:
        execute_from_command_line([str(ROOT / "manage.py"), *arguments])
    except Exception as error:
        if reason := database_refusal(error, arguments[0]):
            raise Refusal(reason) from None
        raise
    return 0


def database_refusal(error: Exception, command: str) -> str | None:
    """What to tell instead of `error` when it comes from a database that no laboratory, or an older one, is in."""
    from django.db import DatabaseError, OperationalError, connection
    from django.db.migrations.executor import MigrationExecutor

    from labsite import settings

    if not isinstance(error, DatabaseError):
        return None
    where = connection.settings_dict["NAME"]
    try:
        executor = MigrationExecutor(connection)
        waiting = executor.migration_plan(executor.loader.graph.leaf_nodes())
    except OperationalError as problem:
        return f"The database {where} cannot be used: {str(problem).strip().splitlines()[0]}"
    if not waiting:
        return None
    if executor.loader.applied_migrations:
        return f"The database {where} belongs to an older version: stop Bandledger and run python3 manage.py migrate."
    if settings.DEMO:
        return f"There is no demonstration laboratory at {where} yet: python3 manage.py start makes it."
    return (
        f"There is no laboratory at {where} yet: python3 manage.py start --own sets it up. "
        f"For the demonstration: python3 manage.py {command} --demo"
    )


# -- the stamp --------------------------------------------------------------------------------------------------


def digest_of(root: Path, names: Sequence[str]) -> str:
    """SHA-256 over the named files, lengths included."""
    whole = hashlib.sha256()
    for name in names:
        content = (root / name).read_bytes()
        whole.update(f"{name} {len(content)}\n".encode())
        whole.update(content)
    return whole.hexdigest()


def wanted_stamp(root: Path, venv: Path) -> dict[str, str]:
    return {
        "python": "%d.%d" % sys.version_info[:2],
        "folder": str(venv),
        "runtime": digest_of(root, RUNTIME_FILES),
        "tests": digest_of(root, TEST_FILES),
    }


def read_stamp(venv: Path) -> dict[str, str]:
    """The stamp of a complete environment, or an empty one; an interpreter that is gone counts as incomplete."""
    try:
        stamp = json.loads((venv / STAMP_NAME).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    if not isinstance(stamp, dict) or not os.access(venv / "bin" / "python", os.X_OK):
        return {}
    return stamp


def write_stamp(venv: Path, stamp: Mapping[str, str]) -> None:
    fresh = venv / (STAMP_NAME + ".new")
    fresh.write_text(json.dumps(stamp, indent=1, sort_keys=True) + "\n", encoding="utf-8")
    os.replace(fresh, venv / STAMP_NAME)


def staleness(stamp: Mapping[str, str], wanted: Mapping[str, str]) -> str | None:
    """Why the runtime has to be built again, in a few words; None when it stands."""
    if not stamp:
        return "it is not there or not complete"
    if stamp.get("folder") != wanted["folder"]:
        return "the folder was moved or copied"
    if stamp.get("python") != wanted["python"]:
        return f"it was made for Python {stamp.get('python')} and this is {wanted['python']}"
    if stamp.get("runtime") != wanted["runtime"]:
        return "the requirements changed"
    return None


# -- locks ------------------------------------------------------------------------------------------------------


def open_lock(path: Path) -> int | None:
    """A descriptor to lock on; None in a read-only folder where nobody ever built."""
    try:
        return os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    except OSError:
        try:
            return os.open(path, os.O_RDONLY | os.O_CLOEXEC)
        except OSError:
            return None


def try_lock(descriptor: int, kind: int) -> bool:
    try:
        fcntl.flock(descriptor, kind | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    return True


def lock_within(descriptor: int, kind: int, seconds: float) -> bool:
    """Try for a while: a command that only looks whether it must wait holds the use lock for an instant."""
    deadline = time.monotonic() + seconds
    while not try_lock(descriptor, kind):
        if time.monotonic() > deadline:
            return False
        time.sleep(0.1)
    return True


@contextmanager
def prepared_environment(with_tests: bool) -> Iterator[int | None]:
    """Yield the shared use lock once `.venv` is complete, building or completing it first where needed."""
    in_use = open_lock(ROOT / ".venv.use")
    try:
        if in_use is not None and not try_lock(in_use, fcntl.LOCK_SH):
            say("Another command is preparing .venv; waiting for it.")
            fcntl.flock(in_use, fcntl.LOCK_SH)
        wanted = wanted_stamp(ROOT, VENV)
        stamp = read_stamp(VENV)
        if staleness(stamp, wanted) or (with_tests and stamp.get("tests") != wanted["tests"]):
            check_can_build()
            building = open_lock(ROOT / ".venv.lock")
            try:
                if not try_lock(building, fcntl.LOCK_EX):
                    # Whoever builds needs the use lock alone, so it is let go while waiting.
                    fcntl.flock(in_use, fcntl.LOCK_UN)
                    say("Another command is preparing .venv; waiting for it.")
                    fcntl.flock(building, fcntl.LOCK_EX)
                bring_up_to_date(in_use, wanted, with_tests)
                fcntl.flock(in_use, fcntl.LOCK_SH)
            finally:
                os.close(building)
        yield in_use
    finally:
        if in_use is not None:
            os.close(in_use)


def bring_up_to_date(in_use: int, wanted: Mapping[str, str], with_tests: bool) -> None:
    """Called with the building lock held: another command may have done the work meanwhile."""
    reason = staleness(read_stamp(VENV), wanted)
    if reason:
        if VENV.exists() and not lock_within(in_use, fcntl.LOCK_EX, IN_USE_PATIENCE_SECONDS):
            raise Refusal(
                f"The environment .venv has to be made anew ({reason}), but a running command uses it: "
                "stop that one first (a running start ends with Ctrl-C)."
            )
        build(VENV, wanted, reason)
    stamp = read_stamp(VENV)
    if with_tests and stamp.get("tests") != wanted["tests"]:
        say("Adding what the tests need.")
        install(VENV / "bin" / "python", ROOT / "tests" / "requirements.lock")
        write_stamp(VENV, wanted)


# -- building ---------------------------------------------------------------------------------------------------


def check_can_build() -> None:
    """Refuse with the remedy before anything is made."""
    if importlib.util.find_spec("venv") is None or importlib.util.find_spec("ensurepip") is None:
        version = "%d.%d" % sys.version_info[:2]
        raise Refusal(
            f"This Python {version} has no venv module: install it (Debian, Ubuntu: apt install python{version}-venv) "
            "and run the same command again."
        )
    if not os.access(ROOT, os.W_OK | os.X_OK):
        raise Refusal(
            f"The folder {ROOT} is read-only: copy Bandledger to a folder you can write to, and start it there."
        )


def base_interpreter() -> str:
    """The Python to build from: never an environment's own, which may be the one about to be replaced."""
    return getattr(sys, "_base_executable", None) or sys.executable


def build(venv: Path, wanted: Mapping[str, str], reason: str) -> None:
    """Make the runtime environment beside its place and rename it there; leave nothing half-made behind."""
    say(f"Preparing .venv: {reason}. This takes a minute or two and is needed once.")
    for leftover in venv.parent.glob(venv.name + ".new-*"):
        shutil.rmtree(leftover, ignore_errors=True)
    fresh = venv.with_name(f"{venv.name}.new-{os.getpid()}")
    try:
        run_quietly([base_interpreter(), "-m", "venv", str(fresh)], "The environment could not be made")
        install(fresh / "bin" / "python", ROOT / "labsite" / "requirements.lock")
        point_scripts_at(fresh, venv)
        write_stamp(fresh, {key: value for key, value in wanted.items() if key != "tests"})
        if venv.is_symlink():
            venv.unlink()
        elif venv.exists():
            shutil.rmtree(venv)
        fresh.rename(venv)
    except OSError as error:
        raise Refusal(f"The environment could not be made: {error.strerror or error} ({error.filename}).") from error
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


def point_scripts_at(fresh: Path, venv: Path) -> None:
    """Scripts name their interpreter by its full path; give them the path the folder is about to have."""
    old, new = os.fsencode(fresh), os.fsencode(venv)
    for script in (fresh / "bin").iterdir():
        if script.is_symlink() or not script.is_file():
            continue
        content = script.read_bytes()
        if old in content and (content.startswith(b"#!") or b"\0" not in content):
            script.write_bytes(content.replace(old, new))


def install(python: Path, lock: Path) -> None:
    """Install the locked packages with their hashes checked, counting them off on the terminal."""
    total = sum(1 for line in lock.read_text(encoding="utf-8").splitlines() if "==" in line)
    command = [str(python), "-m", "pip", "install", "--disable-pip-version-check", "--no-input"]
    command += ["--progress-bar", "off", "--require-hashes", "-r", str(lock)]
    tail: deque[str] = deque(maxlen=15)
    progress = Progress(total)
    with subprocess.Popen(
        command, env=clean_environment(), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
        text=True, errors="replace",
    ) as pip:  # fmt: skip
        for line in pip.stdout:
            tail.append(line.rstrip())
            progress.see(line)
    progress.end()
    if pip.returncode:
        say("\n".join(tail))
        raise Refusal(
            "The packages could not be installed (pip's last lines stand above): check the network or pip's own "
            "settings and run the same command again."
        )


class Progress:
    """Counts packages off as pip names them: one line that is rewritten on a terminal, else every tenth package."""

    def __init__(self, total: int, stream=None) -> None:
        self.total, self.count, self.stream = total, 0, stream or sys.stderr
        self.on_terminal = self.stream.isatty()

    def see(self, line: str) -> None:
        words = line.split()
        if line.startswith("Collecting ") or line.startswith("Requirement already satisfied: "):
            name = words[1] if line.startswith("Collecting ") else words[3]
            self.count += 1
            if self.on_terminal or self.count % 10 == 1:
                self.show(f"  {self.count} of {self.total} packages: {name}")
        elif line.startswith("Installing collected packages"):
            self.show("  installing them")

    def show(self, text: str) -> None:
        self.stream.write(f"\r\033[K{text}" if self.on_terminal else text + "\n")
        self.stream.flush()

    def end(self) -> None:
        if self.on_terminal:
            self.stream.write("\r\033[K")
            self.stream.flush()


def run_quietly(command: list[str], complaint: str) -> None:
    """Run a command that says something only when it fails."""
    done = subprocess.run(
        command, env=clean_environment(), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.STDOUT,
        text=True, errors="replace",
    )  # fmt: skip
    if done.returncode:
        lines = [line for line in done.stdout.splitlines() if line.strip()]
        raise Refusal(f"{complaint}: {lines[-1] if lines else 'no reason was given'}")


# -- the child --------------------------------------------------------------------------------------------------


def clean_environment() -> dict[str, str]:
    return {name: value for name, value in os.environ.items() if name not in DROPPED_VARIABLES}


def run_child(command: Sequence[str], keep_open: int | None = None) -> int:
    """Run the command to its end, passing signals on and returning its exit code (128 + n when a signal ended it).

    `keep_open` is inherited, so that the use lock outlives this process if it is killed.
    """
    environment = {**clean_environment(), "BANDLEDGER_BOOTSTRAPPED": "1"}
    inherited = () if keep_open is None else (keep_open,)
    waiting: list[int] = []
    child: subprocess.Popen | None = None

    def pass_on(number: int, frame: object) -> None:
        if child is None:
            waiting.append(number)
        elif number != signal.SIGINT or not typed_at_our_terminal():
            child.send_signal(number)

    with handled((signal.SIGINT, signal.SIGTERM, signal.SIGHUP), pass_on):
        child = subprocess.Popen(command, env=environment, pass_fds=inherited)
        for number in waiting:
            child.send_signal(number)
        code = child.wait()
    return code if code >= 0 else 128 - code


def typed_at_our_terminal() -> bool:
    """Whether Ctrl-C at the terminal reaches the child by itself, since both are its foreground group."""
    try:
        terminal = os.open("/dev/tty", os.O_RDONLY | os.O_NOCTTY)
    except OSError:
        return False
    try:
        return os.tcgetpgrp(terminal) == os.getpgrp()
    finally:
        os.close(terminal)


@contextmanager
def handled(numbers: Sequence[int], handler: Callable[[int, object], None]) -> Iterator[None]:
    # A signal that whoever started us had ignored (nohup, a shell's background job) stays ignored.
    numbers = [number for number in numbers if signal.getsignal(number) != signal.SIG_IGN]
    before = {number: signal.signal(number, handler) for number in numbers}
    try:
        yield
    finally:
        for number, old in before.items():
            signal.signal(number, old)
