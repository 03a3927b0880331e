"""The Celery app. Tasks are doorbells: they take an id and call one service; the database row is the result."""

from __future__ import annotations

import os
import warnings

from celery import Celery
from celery.platforms import SecurityWarning
from django.conf import settings
from kombu.transport import TRANSPORT_ALIASES

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labsite.settings")

# kombu takes no import path from a URL, only a name it knows.
FILE_BROKER = "bandledger"
TRANSPORT_ALIASES[FILE_BROKER] = "labsite.broker:Transport"

# Five lines against the superuser account at every start; the supervisor says it in one, and messages are JSON only.
warnings.filterwarnings("ignore", category=SecurityWarning)


def configuration(*, broker_url: str, broker_folder: str, lease_seconds: int) -> dict[str, object]:
    """Celery's settings: the file-backed broker when no URL is given, Redis otherwise."""
    common: dict[str, object] = {
        "broker_connection_retry_on_startup": True,
        "broker_connection_max_retries": None,
        "task_ignore_result": True,
        "task_store_errors_even_if_ignored": False,
        "task_serializer": "json",
        "accept_content": ["json"],
        # The message is kept until the task has ended: a worker then holds one message, not one running and one more.
        "task_acks_late": True,
        "worker_prefetch_multiplier": 1,
        # Only the prefork pool enforces these. They bound a task that still reports that it is alive; one that does
        # not is found by its lease, and the supervisor ends its worker.
        "task_soft_time_limit": 5 * lease_seconds,
        "task_time_limit": 6 * lease_seconds,
        # A failed send is logged by spectra.queue and rung again by the sweep: never wait for it in a request.
        "task_publish_retry": False,
        # How long the pool waits for the result of a process that was ended, before it takes the next message.
        "worker_lost_wait": 1.0,
        "worker_send_task_events": False,
        "worker_hijack_root_logger": False,
        "worker_max_tasks_per_child": 200,
        "enable_utc": True,
        "timezone": "UTC",
    }
    if broker_url:
        options = {
            "socket_connect_timeout": 2,
            "socket_timeout": 5,
            "visibility_timeout": 12 * lease_seconds,
            # Left alone, a send tries for six seconds while Redis is down, and a request waits for it.
            "max_retries": 1,
            "interval_start": 0,
            "interval_step": 0,
        }
        return {**common, "broker_url": broker_url, "broker_transport_options": options}
    return {
        **common,
        "broker_url": f"{FILE_BROKER}://localhost",
        "broker_transport_options": {"folder": broker_folder},
        # Remote control needs queues of its own that nobody would clear.
        "worker_enable_remote_control": False,
    }


app = Celery("bandledger")
app.config_from_object(
    configuration(
        broker_url=settings.BROKER_URL,
        broker_folder=str(settings.BROKER_DIR),
        lease_seconds=settings.ANALYSIS_LEASE_SECONDS,
    )
)
app.autodiscover_tasks()
