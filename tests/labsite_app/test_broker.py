"""The file-backed broker: a message may be lost or come twice, but nothing that lies in the folder stops a worker."""

from __future__ import annotations

import os
import socket
import subprocess
import sys
import time
from pathlib import Path
from queue import Empty

import pytest
import redis
from kombu import Connection, Exchange, Queue
from kombu.exceptions import ChannelError, OperationalError

from labsite import broker

ROOT = Path(__file__).resolve().parents[2]
QUEUE = Queue("work", exchange=Exchange("work"), routing_key="work")


def connect(folder: Path) -> Connection:
    return Connection(transport="labsite.broker:Transport", transport_options={"folder": str(folder)})


@pytest.fixture
def channel(tmp_path):
    with connect(tmp_path) as connection:
        yield connection.default_channel


def send(channel, *bodies: object) -> None:
    producer = channel.connection.client.Producer(channel, serializer="json")
    for body in bodies:
        producer.publish({"body": body}, exchange=QUEUE.exchange, routing_key="work", declare=[QUEUE], retry=False)


def receive(channel) -> object:
    """The next message's body, acknowledged; raises Empty when there is none."""
    message = QUEUE(channel).get()
    if message is None:
        raise Empty
    message.ack()
    return message.payload["body"]


def files(folder: Path, part: str) -> list[Path]:
    return sorted((folder / part).iterdir())


def test_messages_arrive_in_the_order_they_were_sent(channel, tmp_path):
    send(channel, *range(20))
    assert [receive(channel) for _ in range(20)] == list(range(20))
    assert files(tmp_path, "waiting") == files(tmp_path, "taken") == files(tmp_path, "bad") == []


def test_order_is_by_number_so_that_it_survives_a_restart_of_the_machine():
    names = ["9-00000000-a.work.msg", "10-00000002-a.work.msg", "10-00000010-a.work.msg", "odd.work.msg"]
    assert sorted(names, key=broker.age_order) == ["odd.work.msg", *names[:3]]
    made = [broker.message_name("work") for _ in range(50)]
    assert made == sorted(made, key=broker.age_order)


@pytest.mark.parametrize(
    "content",
    [
        b"",
        b'{"body": "half of a mess',
        b"\x00\xff\xfe",
        b"[]",
        b"{}",
        b'{"properties": {}}',
        b'{"body": "x", "properties": {"delivery_tag": "1", "body_encoding": "no such"}, "headers": {}}',
        b"[" * 100_000,
    ],
    ids=["empty", "torn", "binary", "list", "no properties", "no tag", "unknown encoding", "deep"],
)
def test_a_file_that_is_no_message_is_set_aside_and_the_next_one_is_read(channel, tmp_path, content):
    send(channel, "before")
    (tmp_path / "waiting" / broker.message_name("work")).write_bytes(content)
    (tmp_path / "waiting" / "stray.work.msg").write_bytes(content)
    send(channel, "after")
    assert [receive(channel), receive(channel)] == ["before", "after"]
    with pytest.raises(Empty):
        receive(channel)
    assert len(files(tmp_path, "bad")) == 2


def test_a_folder_named_like_a_message_does_not_stop_the_reader(channel, tmp_path):
    send(channel, "real")
    (tmp_path / "waiting" / "0-0-x.work.msg").mkdir()
    assert receive(channel) == "real"


def test_only_so_many_bad_files_are_kept(channel, tmp_path, monkeypatch):
    monkeypatch.setattr(broker, "MOST_BAD_KEPT", 3)
    send(channel, "real")
    for number in range(8):
        (tmp_path / "waiting" / f"0-{number}-x.work.msg").write_bytes(b"")
    assert receive(channel) == "real"
    assert len(files(tmp_path, "bad")) == 3


def test_a_message_half_written_is_not_seen(channel, tmp_path, monkeypatch):
    send(channel, "whole")

    def full_disk(source, target):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(broker.os, "replace", full_disk)
    with pytest.raises(ChannelError, match="could not be written"):
        send(channel, "lost")
    monkeypatch.undo()
    assert len(files(tmp_path, "waiting")) == 1
    assert receive(channel) == "whole"


def test_a_full_queue_turns_messages_away_and_takes_them_again_later(channel):
    send(channel, *range(broker.MOST_WAITING))
    with pytest.raises(ChannelError, match="50 messages wait"):
        send(channel, "one too many")
    receive(channel)
    send(channel, "welcome")


def test_a_message_not_acknowledged_comes_back_when_its_reader_closes(tmp_path):
    with connect(tmp_path) as first:
        send(first.default_channel, "again")
        assert QUEUE(first.default_channel).get().payload["body"] == "again"
    with connect(tmp_path) as second:
        assert receive(second.default_channel) == "again"


def test_a_queue_cannot_name_a_file_elsewhere(channel):
    with pytest.raises(ChannelError):
        channel._put("../../escape", {})


def test_clearing_removes_waiting_and_taken_messages_only(channel, tmp_path):
    send(channel, 1, 2)
    waiting = files(tmp_path, "waiting")
    os.rename(waiting[0], tmp_path / "taken" / f"1-{waiting[0].name}")
    (tmp_path / "waiting" / ".x.tmp").write_bytes(b"")
    assert broker.clear_folder(tmp_path) == 2
    assert files(tmp_path, "waiting") == files(tmp_path, "taken") == []
    assert broker.clear_folder(tmp_path / "never made") == 0


CONSUMER = """
import sys
from kombu import Connection, Exchange, Queue

folder = sys.argv[1]
queue = Queue("work", exchange=Exchange("work"), routing_key="work")
with Connection(transport="labsite.broker:Transport", transport_options={"folder": folder}) as connection:
    done = []
    def take(body, message):
        message.ack()
        print(body["body"], flush=True)
        done.append(body["body"] == "stop")
    with connection.Consumer([queue], callbacks=[take]):
        while not any(done):
            connection.drain_events(timeout=20)
"""


def test_two_readers_share_the_messages_and_none_is_read_twice(tmp_path):
    readers = [
        subprocess.Popen([sys.executable, "-c", CONSUMER, str(tmp_path)], cwd=ROOT, stdout=subprocess.PIPE, text=True)
        for _ in range(2)
    ]
    with connect(tmp_path) as connection:
        channel = connection.default_channel
        deadline = time.monotonic() + 30
        sent = 0
        while sent < 200:
            try:
                send(channel, sent)
            except ChannelError:  # full: the readers are still starting
                assert time.monotonic() < deadline
                time.sleep(0.01)
                continue
            if sent % 10 == 0:
                (tmp_path / "waiting" / broker.message_name("work")).write_bytes(b"")
            sent += 1
        while channel._size("work"):
            assert time.monotonic() < deadline
            time.sleep(0.01)
        send(channel, "stop", "stop")
    # A reader that took its stop leaves the other stop to the other reader.
    outputs = [reader.communicate(timeout=60)[0].split() for reader in readers]
    numbers = [int(word) for words in outputs for word in words if word != "stop"]
    assert sorted(numbers) == list(range(200))
    assert len(files(tmp_path, "bad")) == 20
    assert [reader.returncode for reader in readers] == [0, 0]


def test_the_file_broker_is_found_by_its_name_and_redis_by_its_url():
    from labsite.celery import configuration

    files_configuration = configuration(broker_url="", broker_folder="/data/broker", lease_seconds=60)
    assert files_configuration["broker_transport_options"] == {"folder": "/data/broker"}
    assert Connection(files_configuration["broker_url"]).transport_cls == "bandledger"
    assert isinstance(
        Connection(files_configuration["broker_url"], transport_options={"folder": "/data"}).transport, broker.Transport
    )
    shared = configuration(broker_url="redis://127.0.0.1:6379/0", broker_folder="", lease_seconds=60)
    assert shared["broker_url"] == "redis://127.0.0.1:6379/0"
    assert shared["broker_transport_options"]["visibility_timeout"] > shared["task_time_limit"]


def redis_connection(url: str) -> Connection:
    from labsite.celery import configuration

    shared = configuration(broker_url=url, broker_folder="", lease_seconds=60)
    return Connection(shared["broker_url"], transport_options=shared["broker_transport_options"])


def test_messages_go_through_redis_with_our_settings():
    url = os.environ.get("BANDLEDGER_TEST_REDIS_URL", "redis://127.0.0.1:6379/9")
    try:
        redis.Redis.from_url(url, socket_connect_timeout=2).ping()
    except redis.RedisError as error:
        pytest.skip(f"no Redis answers at {url} ({type(error).__name__}); BANDLEDGER_TEST_REDIS_URL names another")
    name = f"bandledger-test-{os.getpid()}"
    queue = Queue(name, exchange=Exchange(name), routing_key=name)
    with redis_connection(url) as connection:
        try:
            connection.Producer(serializer="json").publish({"id": 7}, exchange=queue.exchange, routing_key=name,
                                                           declare=[queue])  # fmt: skip
            message = queue(connection.default_channel).get()
            assert message.payload == {"id": 7}
            message.ack()
        finally:
            queue(connection.default_channel).delete()


def test_a_redis_that_is_down_is_given_up_at_once():
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    started = time.monotonic()
    with redis_connection(f"redis://127.0.0.1:{port}/0") as connection, pytest.raises(OperationalError):
        connection.default_channel.queue_declare("work")
    assert time.monotonic() - started < 2


def test_a_ring_goes_to_the_configured_broker_from_any_command():
    # A task bound to no app would go to whatever broker happens to listen on this machine.
    code = "import django; django.setup(); from spectra.tasks import run_analysis; print(run_analysis.app.main)"
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=ROOT, env={**os.environ, "DJANGO_SETTINGS_MODULE": "labsite.settings"}, capture_output=True, text=True,
        timeout=60,
    )  # fmt: skip
    assert done.stdout.strip() == "bandledger", done.stderr
