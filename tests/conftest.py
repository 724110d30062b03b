"""Fixtures for the whole suite: real servers and real processes of this project."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from tests.services import plugin
from tests.services.processes import RunningProcess, TestProcesses

if TYPE_CHECKING:
    from kinetics_db.config.processes.valkey import Valkey


@pytest.fixture
def broker() -> Iterator[Valkey]:
    """The queue of this test process, empty; a test may stop, kill, flush and start it."""
    import redis

    if plugin.services is None:
        raise RuntimeError("load the plugin: python -m pytest -p tests.services.plugin")
    server = plugin.services.broker
    if not server.is_running:
        server.start()
    with redis.Redis(unix_socket_path=str(server.socket)) as client:
        client.flushall()
    yield server
    if not server.is_running:
        server.start()


@pytest.fixture
def process_environment(transactional_db: None, broker: Valkey) -> dict[str, str]:
    """What a process needs to work on the database and the queue of the running test."""
    from django.db import connection

    assert plugin.services is not None
    name = str(connection.settings_dict["NAME"])
    if plugin.services.on_sqlite:
        database = {"RATEWRIGHT_TEST_DB": "sqlite", "RATEWRIGHT_SQLITE_FILE": name}
    else:
        database = {"RATEWRIGHT_DATABASE_URL": plugin.database_url(name)}
    return {
        **database,
        "DJANGO_SETTINGS_MODULE": "kinetics_db.config.settings.test",
        "RATEWRIGHT_BROKER_URL": broker.url(),
    }


@pytest.fixture
def own_processes(process_environment: dict[str, str], tmp_path: Path) -> Iterator[TestProcesses]:
    """Starts processes of this project, and stops what is left of them after the test."""
    processes = TestProcesses(tmp_path / "log", process_environment)
    try:
        yield processes
    finally:
        processes.stop_all()


@pytest.fixture
def celery_worker_process(own_processes: TestProcesses) -> Callable[..., RunningProcess]:
    """Start a real worker: ``worker = celery_worker_process(concurrency=2)``; then ``worker.kill()`` etc."""
    return own_processes.start_worker


@pytest.fixture
def sweeper_process(own_processes: TestProcesses) -> Callable[..., RunningProcess]:
    """Start a real sweeper: ``sweeper = sweeper_process(every=0.5)``."""
    return own_processes.start_sweeper


@pytest.fixture
def web_server_process(own_processes: TestProcesses) -> Callable[..., tuple[RunningProcess, str]]:
    """Start the real web server: ``server, address = web_server_process()``."""
    return own_processes.start_web_server
