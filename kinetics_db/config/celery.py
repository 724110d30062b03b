"""The Celery application: early acknowledgement, ids only, no results kept; the job's row is the truth."""

import os

from celery import Celery

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "kinetics_db.config.settings.local")

app = Celery("ratewright")


def configure() -> Celery:
    """Take the broker from Django's settings; called by the worker's entry and by the task queue."""
    from django.conf import settings

    url = settings.BROKER_URL
    if not url:
        raise RuntimeError(
            "no broker: set RATEWRIGHT_BROKER_URL, or start everything with `make demo` or `make serve`"
        )
    app.conf.update(
        broker_url=url,
        task_ignore_result=True,
        task_acks_late=False,
        task_default_queue="ratewright",
        worker_prefetch_multiplier=1,
        worker_concurrency=settings.WORKER_PROCESSES,
        worker_soft_shutdown_timeout=5.0,
        worker_hijack_root_logger=False,
        broker_connection_retry_on_startup=True,
        broker_connection_max_retries=None,
        broker_transport_options={"socket_connect_timeout": 3, "socket_timeout": 10, "max_retries": 2},
        # Without the file that keeps when a bell was last rung: what rings every few seconds needs none.
        beat_scheduler="celery.beat:Scheduler",
        task_serializer="json",
        accept_content=["json"],
        enable_utc=True,
    )
    return app
