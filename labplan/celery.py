"""Celery on the Redis protocol: how work is run everywhere but in the demo and in unit tests.

All state lies in the database; the broker carries the ids of outbox messages and nothing else, so
losing it loses nothing. A message is acknowledged when its run has ended. A run that takes its
process with it is sent back by the pool at once, or sent again when its lease ends; the work itself
counts how often that happens.
"""

import os

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labplan.settings.default")

import django

django.setup()  # the sweeps and topics register themselves when the apps are loaded

from celery import Celery
from django.conf import settings
from kombu import Queue

from labplan.base import housekeeping
from labplan.base.outbox import HOUSEKEEPING, QUEUES
from labplan.base.tasks import run_sweep

# a child that has grown beyond this is replaced after its task [kB]
CHILD_MEMORY_KB = 400_000
# when a child is replaced in any case: what leaks slowly never grows large
TASKS_PER_CHILD = 2_000

app = Celery("labplan")
app.conf.update(
    broker_url=settings.BROKER_URL.replace("unix://", "redis+socket://", 1) or None,
    broker_connection_retry_on_startup=True,
    broker_connection_max_retries=None,
    broker_transport_options={
        # Redelivery rests on the lease in the database; this is for what the broker alone knows.
        "visibility_timeout": 3600,
        "socket_timeout": 10,
        "socket_connect_timeout": 5,
        "health_check_interval": 10,
    },
    task_serializer="json",
    result_serializer="json",
    accept_content=["json"],
    task_ignore_result=True,
    task_acks_late=True,
    task_reject_on_worker_lost=True,
    task_create_missing_queues=False,
    task_queues=[Queue(name) for name in QUEUES],
    task_default_queue=HOUSEKEEPING,
    worker_lost_wait=1.0,  # before a child that died is believed to be dead [s]
    worker_prefetch_multiplier=1,
    worker_disable_prefetch=True,  # a child that is busy has nothing waiting behind it
    worker_max_memory_per_child=CHILD_MEMORY_KB,
    worker_max_tasks_per_child=TASKS_PER_CHILD,
    worker_enable_remote_control=False,
    worker_send_task_events=False,
    worker_hijack_root_logger=False,
    worker_proc_alive_timeout=30,
    beat_schedule={
        name: {
            "task": run_sweep.name,
            "schedule": duty.every,
            "args": [name],
            # A sweep that waited longer than its period is not needed any more.
            "options": {"queue": HOUSEKEEPING, "expires": duty.every.total_seconds()},
        }
        for name, duty in housekeeping.duties().items()
    },
    imports=["labplan.base.tasks", "labplan.base.worker"],
    enable_utc=True,
)
