"""The file-backed message broker of the default run mode, one file a message, on kombu's base for such transports.

A message here only says "look at that row", so it may be lost or come twice, but it must never stop a worker.
kombu has a transport of this kind; this one is as small as a doorbell allows and differs where that one hurts:

* a message appears in one step (`os.replace`), so nobody reads half of one;
* it is taken by renaming it to a private name first, so exactly one reader has it;
* a file that is empty, torn or no message is set aside in `bad/` and logged, and the reader goes on;
* names begin with wall-clock nanoseconds, so the order survives a restart of the machine;
* everything lies in one folder given by `transport_options["folder"]`, hence in one filesystem;
* only direct exchanges, whose queue is named by the routing key: no table of bindings that could be torn;
* a queue takes at most `MOST_WAITING` messages; the sweep rings again for rows whose message was turned away.

There is no fsync: after a power cut the files may be empty, which is the third point, and the rows are still there.
"""

from __future__ import annotations

import itertools
import logging
import os
import re
import uuid
from functools import cached_property
from pathlib import Path
from queue import Empty
from time import time_ns

from kombu.exceptions import ChannelError
from kombu.transport import virtual
from kombu.utils.json import dumps, loads

logger = logging.getLogger(__name__)

MOST_WAITING = 50
MOST_BAD_KEPT = 50
POLLING_SECONDS = 0.05
QUEUE_NAME = re.compile(r"\A[A-Za-z0-9_-]{1,100}\Z")

_count = itertools.count()


def message_name(queue: str) -> str:
    """A file name that no other message has, sorting by the time it was made."""
    return f"{time_ns():020d}-{next(_count):08d}-{uuid.uuid4().hex}.{queue}.msg"


def age_order(name: str) -> tuple[int, int, str]:
    """Sort key: oldest first, by number; a name that was not made here comes first, so that it is set aside."""
    moment, _, rest = name.partition("-")
    count = rest.partition("-")[0]
    if not (moment.isdecimal() and count.isdecimal()):
        return (0, 0, name)
    return (int(moment), int(count), name)


def clear_folder(folder: Path) -> int:
    """Remove every message, waiting or taken, and return how many. Only for a moment when nobody reads or sends."""
    removed = 0
    for part in ("waiting", "taken"):
        for path in sorted((folder / part).glob("*")):
            path.unlink(missing_ok=True)
            removed += path.suffix != ".tmp"
    return removed


def write_whole(path: Path, content: str) -> None:
    fresh = path.with_name(f".{path.name}.{uuid.uuid4().hex}.tmp")
    try:
        fresh.write_text(content, encoding="utf-8")
        os.replace(fresh, path)
    except OSError:
        fresh.unlink(missing_ok=True)
        raise


class Channel(virtual.Channel):
    supports_fanout = False

    # -- folders

    @cached_property
    def folder(self) -> Path:
        folder = Path(self.connection.client.transport_options["folder"])
        for part in ("waiting", "taken", "bad"):
            (folder / part).mkdir(parents=True, exist_ok=True)
        return folder

    def _names(self, queue: str) -> list[str]:
        ending = f".{queue}.msg"
        return [name for name in os.listdir(self.folder / "waiting") if name.endswith(ending)]

    # -- messages

    def _put(self, queue: str, payload: dict, **_) -> None:
        if not QUEUE_NAME.match(queue):
            raise ChannelError(f"Invalid queue name: {queue!r}")
        if self._size(queue) >= MOST_WAITING:
            raise ChannelError(f"{MOST_WAITING} messages wait in queue {queue!r} already")
        try:
            write_whole(self.folder / "waiting" / message_name(queue), dumps(payload))
        except OSError as error:
            raise ChannelError(f"The message could not be written: {error}") from error

    def _get(self, queue: str) -> dict:
        for name in sorted(self._names(queue), key=age_order):
            taken = self.folder / "taken" / f"{os.getpid()}-{name}"
            try:
                os.rename(self.folder / "waiting" / name, taken)
            except OSError:  # another reader was quicker
                continue
            payload = self._read(taken)
            if payload is None:
                self._set_aside(taken)
                continue
            taken.unlink(missing_ok=True)
            return payload
        raise Empty()

    def _read(self, path: Path) -> dict | None:
        """The message in the file, or None when it is not one."""
        try:
            payload = loads(path.read_text(encoding="utf-8"))
            self.Message(payload, channel=self)
        except Exception as error:  # noqa: BLE001 - whatever bytes lie there, the worker must live on
            logger.warning("set aside a file that is no message: %s (%s)", path.name, type(error).__name__)
            return None
        return payload

    def _set_aside(self, path: Path) -> None:
        bad = self.folder / "bad"
        try:
            os.replace(path, bad / path.name)
            for surplus in sorted(bad.iterdir(), key=lambda kept: kept.stat().st_mtime_ns)[:-MOST_BAD_KEPT]:
                surplus.unlink(missing_ok=True)
        except OSError as error:
            logger.warning("could not set aside %s: %s", path.name, error)

    def _size(self, queue: str) -> int:
        return len(self._names(queue))

    def _purge(self, queue: str) -> int:
        names = self._names(queue)
        for name in names:
            (self.folder / "waiting" / name).unlink(missing_ok=True)
        return len(names)

    def _delete(self, queue: str, *_args, **_kwargs) -> None:
        self._purge(queue)

    # -- routing

    def _lookup(self, exchange: str, routing_key: str, default: str | None = None) -> list[str]:
        """The queue has the name of its routing key, so there is no table that could be lost or torn."""
        return [routing_key]


class Transport(virtual.Transport):
    Channel = Channel
    polling_interval = POLLING_SECONDS
    driver_type = "filesystem"
    driver_name = "bandledger"
    implements = virtual.Transport.implements.extend(exchange_type=frozenset(["direct"]))

    def driver_version(self) -> str:
        return "1"
