"""`manage.py start`: prepare the data, then keep the web server, the worker and the sweep running as children.

This process does no work of its own and imports no Django beyond the settings file.

The sweep child prints `stale-worker PID` when a lease has passed: time limits are only enforced by one of Celery's
pools and not on every failure, so that process is ended here, if it is a descendant of the worker.
"""

from __future__ import annotations

import argparse
import errno
import fcntl
import os
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path

from labsite.bootstrap import ROOT, Refusal, handled, say
from labsite.supervisor import STOP_SIGNALS, Program, Supervisor

DEFAULT_HOST = "127.0.0.1"
DEFAULT_PORT = 8760
SERVER_THREADS = 8
CONNECTION_LIMIT = 800  # each takes a file descriptor, of which a process often has 1024
SILENT_SECONDS = 20
BODY_MARGIN_BYTES = 1024 * 1024
SWEEP_SECONDS = 5
READY_SECONDS = 60
STALE_WORKER = "stale-worker "

# Numeric libraries would take every core in every process, and sums would depend on how many there are.
ONE_THREAD = {
    "OMP_NUM_THREADS": "1",
    "OPENBLAS_NUM_THREADS": "1",
    "MKL_NUM_THREADS": "1",
    "VECLIB_MAXIMUM_THREADS": "1",
}


def parse(arguments: Sequence[str]) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="manage.py start", description="Prepare everything and serve Bandledger until Ctrl-C."
    )
    parser.add_argument("--host", default=DEFAULT_HOST, help=f"address to listen on (default {DEFAULT_HOST})")
    parser.add_argument("--port", type=int, default=DEFAULT_PORT, help=f"port to listen on (default {DEFAULT_PORT})")
    parser.add_argument(
        "--own", action="store_true", help="serve a laboratory of your own instead of the demonstration"
    )
    options = parser.parse_args(arguments)
    if not 1 <= options.port <= 65535:
        parser.error(f"--port is {options.port}: use a number from 1 to 65535")
    return options


def check_address(host: str, port: int) -> None:
    """Refuse an address that cannot be listened on, before anything is prepared."""
    try:
        family, kind, protocol, _, address = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)[0]
        with socket.socket(family, kind, protocol) as probe:
            probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            probe.bind(address)
            probe.listen(1)
    except socket.gaierror:
        raise Refusal(f"The address {host} is unknown: name one of this machine's own with --host.") from None
    except PermissionError:
        raise Refusal(f"Port {port} needs special rights: choose one above 1023 with --port.") from None
    except OSError as error:
        if error.errno == errno.EADDRINUSE:
            other = port + 1 if port < 65535 else DEFAULT_PORT
            raise Refusal(f"Port {port} on {host} is taken: choose another, for example --port {other}.") from None
        raise Refusal(f"Cannot listen on {host}: {error.strerror}. Choose another address with --host.") from None


def check_before_building(arguments: Sequence[str], *, environment_is_there: bool) -> None:
    """Refuse wrong options, and on a first start a taken port, before minutes go into an environment."""
    options = parse(arguments)
    if not environment_is_there:
        check_address(options.host, options.port)


def address_text(host: str, port: int) -> str:
    return f"http://[{host}]:{port}/" if ":" in host else f"http://{host}:{port}/"


@contextmanager
def only_one(data_folder: Path, address: str) -> Iterator[None]:
    """Hold the laboratory's start lock; two supervisors would take each other's messages."""
    path = data_folder / "start.lock"
    with open(path, "a+", encoding="utf-8") as lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            lock.seek(0)
            other = lock.read().strip() or "another command"
            raise Refusal(f"This laboratory is served already ({other}): use that one, or stop it first.") from None
        lock.truncate(0)
        lock.write(f"pid {os.getpid()}, {address}\n")
        lock.flush()
        yield


def child_environment(host: str) -> dict[str, str]:
    environment = {**os.environ, **ONE_THREAD, "PYTHONUNBUFFERED": "1"}
    if not environment.get("BANDLEDGER_ALLOWED_HOSTS"):
        names = ["localhost", "127.0.0.1", "[::1]"]
        own = socket.gethostname() if host in ("0.0.0.0", "::") else f"[{host}]" if ":" in host else host
        environment["BANDLEDGER_ALLOWED_HOSTS"] = ",".join(dict.fromkeys([*names, own]))
    return environment


def is_chatter(line: str) -> bool:
    """What the server and the worker say about starting and stopping, which is said here already."""
    return "waitress Serving on" in line or line == "worker: Warm shutdown (MainProcess)"


def programs(
    host: str, port: int, *, upload_max_bytes: int, trusted_proxy: str, on_sweep_line: Callable[[str], bool]
) -> list[Program]:
    """The three children. `trusted_proxy` is the address whose word on the client and on HTTPS is believed, or ''."""
    python, manage = sys.executable, str(ROOT / "manage.py")
    listen = f"[{host}]:{port}" if ":" in host else f"{host}:{port}"
    # The server stores a body before the application can refuse it, whoever sends it, so it bounds it itself. And it
    # closes what stays silent, or a few connections that never finish a request would keep everybody out.
    server = [python, "-m", "waitress", f"--listen={listen}", f"--threads={SERVER_THREADS}", "--ident=",
              f"--max-request-body-size={upload_max_bytes + BODY_MARGIN_BYTES}",
              f"--connection-limit={CONNECTION_LIMIT}", f"--channel-timeout={SILENT_SECONDS}",
              f"--cleanup-interval={SILENT_SECONDS // 2}", "--asyncore-use-poll"]  # fmt: skip
    if trusted_proxy:
        server += [f"--trusted-proxy={trusted_proxy}", "--trusted-proxy-headers=x-forwarded-for x-forwarded-proto"]
    # The prefork pool forks after system libraries were used, which macOS does not allow.
    pool = ["--pool=solo"] if sys.platform == "darwin" else ["--pool=prefork", "--concurrency=1"]
    worker = [python, "-m", "celery", "--quiet", "--app=labsite.celery", "worker", *pool, "--loglevel=WARNING",
              "--without-gossip", "--without-mingle", "--without-heartbeat"]  # fmt: skip
    return [
        Program("web server", (*server, "labsite.wsgi:application"), is_chatter),
        Program("worker", tuple(worker), is_chatter),
        Program("sweep", (python, manage, "sweep", "--every", str(SWEEP_SECONDS)), on_sweep_line),
    ]


def step(arguments: Sequence[str], environment: Mapping[str, str], *, keep_output: bool = False) -> str:
    """Run one `manage.py` command to its end; refuse when it fails."""
    command = [sys.executable, str(ROOT / "manage.py"), *arguments]
    interrupted: list[int] = []
    with handled(STOP_SIGNALS, lambda number, frame: interrupted.append(number)):
        process = subprocess.Popen(
            command, env=environment, cwd=ROOT, text=True, stdout=subprocess.PIPE if keep_output else None
        )
        while True:
            try:
                output, _ = process.communicate(timeout=0.1)
                break
            except subprocess.TimeoutExpired:
                if interrupted:
                    process.terminate()
    if interrupted:
        raise KeyboardInterrupt
    if process.returncode:
        raise Refusal(f"Stopped: {' '.join(arguments[:1])} failed; its reason stands above.")
    return output or ""


def load_settings(own: bool):
    """The settings file, read without Django's machinery; a refusal in it becomes ours."""
    os.environ["BANDLEDGER_DEMO"] = "0" if own else "1"
    from django.core.exceptions import ImproperlyConfigured

    try:
        from labsite import settings
    except ImproperlyConfigured as error:
        if not own and os.environ.get("BANDLEDGER_PRODUCTION"):
            raise Refusal(
                "The demonstration is refused in production: serve your own laboratory, start --own."
            ) from None
        raise Refusal(str(error)) from None
    except OSError as error:
        raise Refusal(
            f"Cannot write {error.filename}: {error.strerror}. Name a folder for the data with BANDLEDGER_VAR."
        ) from None
    return settings


def main(arguments: Sequence[str]) -> int:
    options = parse(arguments)
    settings = load_settings(options.own)
    address = address_text(options.host, options.port)
    environment = child_environment(options.host)
    with only_one(settings.DATA_DIR, address):
        check_address(options.host, options.port)
        prepare(options.own, settings, environment)
        return serve(options, settings, environment, address)


def prepare(own: bool, settings, environment: Mapping[str, str]) -> None:
    """Bring the database up to date and see that there is somebody who can sign in."""
    if os.geteuid() == 0:
        say("Running with superuser rights; an account without them is safer.")
    say("Preparing the database.")
    Path(settings.STATIC_ROOT).mkdir(parents=True, exist_ok=True)  # WhiteNoise warns of a missing one
    step(["migrate", "--verbosity", "0"], environment)
    if settings.PRODUCTION:
        step(["collectstatic", "--noinput", "--verbosity", "0"], environment)
    step(["first_administrator", "--if-none"] if own else ["load_demo"], environment)
    if not settings.BROKER_URL:
        from labsite.broker import clear_folder

        clear_folder(Path(settings.BROKER_DIR))  # the rows are the truth; the sweep rings for them again


def serve(options: argparse.Namespace, settings, environment: Mapping[str, str], address: str) -> int:
    def on_sweep_line(line: str) -> bool:
        if not line.startswith(STALE_WORKER):
            return False
        pid = line.removeprefix(STALE_WORKER).strip()
        if pid.isdecimal():
            supervisor.kill_worker_process(int(pid))
        return True

    # A bootstrap that was killed cannot pass signals on any more. Run by other means, we may outlive our parent.
    by_bootstrap = os.environ.get("BANDLEDGER_BOOTSTRAPPED") == "1" and os.environ.get("BANDLEDGER_NO_VENV") != "1"
    behind_proxy = bool(getattr(settings, "SECURE_PROXY_SSL_HEADER", None))
    supervisor = Supervisor(
        programs(
            options.host,
            options.port,
            upload_max_bytes=settings.UPLOAD_MAX_BYTES,
            trusted_proxy=os.environ.get("BANDLEDGER_TRUSTED_PROXY", "127.0.0.1") if behind_proxy else "",
            on_sweep_line=on_sweep_line,
        ),
        environment=environment,
        parent_pid=os.getppid() if by_bootstrap else None,
    )
    accounts = "" if options.own else step(["load_demo", "--accounts"], environment, keep_output=True).rstrip()
    announcement = Announcement(options.host, options.port, address, accounts)
    code = supervisor.run(announcement.when_ready)
    say("Stopped.")
    return code


class Announcement:
    """Says once that the server answers, where, and who can sign in; complains once if that takes too long."""

    def __init__(self, host: str, port: int, address: str, accounts: str) -> None:
        self.target = ({"0.0.0.0": "127.0.0.1", "::": "::1"}.get(host, host), port)
        self.host, self.address, self.accounts = host, address, accounts
        self.deadline = time.monotonic() + READY_SECONDS
        self.done = False

    def when_ready(self) -> None:
        if self.done:
            return
        try:
            socket.create_connection(self.target, timeout=0.5).close()
        except OSError:
            if time.monotonic() > self.deadline:
                say(f"The web server does not answer yet at {self.address}; the lines above may say why.")
                self.done = True
            return
        self.done = True
        lines = ["", f"Bandledger: {self.address}"]
        if self.accounts:
            lines += ["", self.accounts]
        if self.host not in ("127.0.0.1", "::1", "localhost"):
            lines += ["", "Others on the network can reach it and passwords travel unprotected: put TLS in front."]
        say("\n".join([*lines, "", "Ctrl-C stops it."]))
