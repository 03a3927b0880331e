"""`manage.py start` for real: it serves, mends what dies, and leaves nothing running."""

from __future__ import annotations

import http.client
import os
import re
import signal
import socket
import subprocess
import sys
import time
from contextlib import ExitStack
from pathlib import Path

import pytest

from labsite import start
from labsite.bootstrap import Refusal

ROOT = Path(__file__).resolve().parents[2]


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def status_of(port: int) -> int | None:
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=10)
    try:
        connection.request("GET", "/sign-in/")
        return connection.getresponse().status
    except OSError:
        return None
    finally:
        connection.close()


def until(condition, seconds: float = 60.0) -> bool:
    deadline = time.monotonic() + seconds
    while not condition():
        if time.monotonic() > deadline:
            return False
        time.sleep(0.1)
    return True


def children_of(pid: int) -> dict[int, str]:
    """The direct children of a process and their command lines."""
    listing = subprocess.run(["ps", "-A", "-o", "pid=,ppid=,args="], capture_output=True, text=True, check=True).stdout
    rows = [line.split(None, 2) for line in listing.splitlines()]
    return {int(row[0]): row[2] for row in rows if len(row) == 3 and int(row[1]) == pid}


@pytest.fixture
def laboratory(tmp_path):
    """The environment of an empty laboratory with its first administrator."""
    environment = {name: value for name, value in os.environ.items() if not name.startswith("BANDLEDGER_")}
    environment |= {
        "BANDLEDGER_NO_VENV": "1",
        "BANDLEDGER_VAR": str(tmp_path / "var"),
        "DATABASE_URL": "",
        "BROKER_URL": "",
    }

    def command(*arguments: str, **more: str) -> subprocess.CompletedProcess:
        return subprocess.run(
            [sys.executable, "manage.py", *arguments],
            cwd=ROOT, env={**environment, **more}, stdin=subprocess.DEVNULL, capture_output=True, text=True,
            timeout=120,
        )  # fmt: skip

    assert command("migrate", "--verbosity", "0").returncode == 0
    opened = command(
        "first_administrator", "--username", "admin", "--printed-name", "Administrator",
        BANDLEDGER_FIRST_PASSWORD="a long phrase of five words",
    )  # fmt: skip
    assert opened.returncode == 0, opened.stderr
    return environment


def test_start_serves_restarts_what_was_killed_and_leaves_nothing_running(laboratory, tmp_path):
    port = free_port()
    log = tmp_path / "log"
    with open(log, "w") as output:
        served = subprocess.Popen(
            [sys.executable, "manage.py", "start", "--own", "--port", str(port)],
            cwd=ROOT, env=laboratory, stdin=subprocess.DEVNULL, stdout=output, stderr=subprocess.STDOUT,
            start_new_session=True,
        )  # fmt: skip
    pids: set[int] = set()
    try:
        assert until(lambda: f"Bandledger: http://127.0.0.1:{port}/" in log.read_text()), log.read_text()
        assert status_of(port) == 200
        with ExitStack() as open_sockets:
            for _ in range(120):  # more than the web server takes by itself, none of which ends its request
                half_open = socket.create_connection(("127.0.0.1", port), timeout=5)
                open_sockets.enter_context(half_open).sendall(b"GET / HTTP/1.1\r\nHost: localhost\r\n")
            assert status_of(port) == 200
        children = children_of(served.pid)
        pids |= set(children)
        assert len(children) == 3
        server = next(pid for pid, arguments in children.items() if "waitress" in arguments)
        worker = next(pid for pid, arguments in children.items() if "celery" in arguments)
        assert until(lambda: sys.platform == "darwin" or children_of(worker))  # the pool process is there
        pids |= set(children_of(worker))

        for pid in (server, worker):
            os.kill(pid, signal.SIGKILL)
        assert until(lambda: log.read_text().count("(by SIGKILL); starting it again in 1 s") == 2), log.read_text()
        assert until(lambda: status_of(port) == 200)
        assert until(lambda: len(children_of(served.pid)) == 3)
        pids |= set(children_of(served.pid))

        second = subprocess.run(
            [sys.executable, "manage.py", "start", "--own", "--port", str(free_port())],
            cwd=ROOT, env=laboratory, stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=60,
        )  # fmt: skip
        assert second.returncode == 2
        assert re.fullmatch(r"This laboratory is served already \(pid \d+, http://[^)]+\): .*\n", second.stderr)
    finally:
        served.send_signal(signal.SIGINT)
        code = served.wait(timeout=60)
    assert code == 0
    assert log.read_text().rstrip().endswith("Stopped.")
    assert status_of(port) is None
    alive = subprocess.run(["ps", "-A", "-o", "pid="], capture_output=True, text=True, check=True).stdout.split()
    assert not pids & {int(pid) for pid in alive}
    assert "Traceback" not in log.read_text()


# -- its parts --------------------------------------------------------------------------------------------------


def test_a_taken_port_is_refused_with_the_option_that_changes_it():
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen(1)
        port = taken.getsockname()[1]
        with pytest.raises(Refusal, match=rf"Port {port} on 127.0.0.1 is taken: choose another, for example --port"):
            start.check_address("127.0.0.1", port)
    start.check_address("127.0.0.1", port)


def test_an_address_that_is_not_ours_is_refused():
    with pytest.raises(Refusal, match="Choose another address with --host"):
        start.check_address("192.0.2.1", 8760)


def test_one_laboratory_is_served_once(tmp_path):
    second = start.only_one(tmp_path, "http://127.0.0.1:8761/")
    with start.only_one(tmp_path, "http://127.0.0.1:8760/"), pytest.raises(Refusal) as refused, second:
        pass
    assert f"served already (pid {os.getpid()}, http://127.0.0.1:8760/)" in str(refused.value)
    with start.only_one(tmp_path, "http://127.0.0.1:8761/"):
        assert "8761" in (tmp_path / "start.lock").read_text()


def test_numeric_libraries_get_one_thread_in_every_child():
    environment = start.child_environment("127.0.0.1")
    assert environment["OMP_NUM_THREADS"] == environment["OPENBLAS_NUM_THREADS"] == "1"


def test_the_address_listened_on_may_be_asked_for(monkeypatch):
    monkeypatch.delenv("BANDLEDGER_ALLOWED_HOSTS", raising=False)
    hosts = start.child_environment("192.0.2.7")["BANDLEDGER_ALLOWED_HOSTS"].split(",")
    assert hosts == ["localhost", "127.0.0.1", "[::1]", "192.0.2.7"]
    monkeypatch.setenv("BANDLEDGER_ALLOWED_HOSTS", "lab.example")
    assert start.child_environment("192.0.2.7")["BANDLEDGER_ALLOWED_HOSTS"] == "lab.example"


def test_addresses_of_both_families_are_written_so_that_a_browser_takes_them():
    assert start.address_text("127.0.0.1", 8760) == "http://127.0.0.1:8760/"
    assert start.address_text("::1", 8760) == "http://[::1]:8760/"


def test_the_worker_takes_one_message_at_a_time_and_the_server_bounds_what_it_stores():
    server, worker, sweep = start.programs(
        "::1", 8760, upload_max_bytes=2**26, trusted_proxy="192.0.2.7", on_sweep_line=lambda line: True
    )
    assert "--listen=[::1]:8760" in server.command
    assert f"--max-request-body-size={2**26 + 2**20}" in server.command
    assert "--connection-limit=800" in server.command and "--channel-timeout=20" in server.command
    assert "--trusted-proxy=192.0.2.7" in server.command
    assert "--pool=solo" in worker.command or {"--pool=prefork", "--concurrency=1"} <= set(worker.command)
    assert sweep.command[-3:] == ("sweep", "--every", "5")


def test_the_demonstration_is_refused_in_production_with_the_command_that_is_meant(tmp_path):
    environment = {
        **os.environ,
        "BANDLEDGER_NO_VENV": "1",
        "BANDLEDGER_PRODUCTION": "1",
        "BANDLEDGER_VAR": str(tmp_path),
    }
    done = subprocess.run(
        [sys.executable, "manage.py", "start"], cwd=ROOT, env=environment, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 2
    assert "start --own" in done.stderr
    assert done.stderr.count("\n") == 1
