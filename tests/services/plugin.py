"""Real servers for the suite: one PostgreSQL a session, one Valkey for each test process.

Loaded with ``-p tests.services.plugin`` (see pyproject.toml), because the settings take the servers'
addresses from the environment and pytest-django reads the settings before any conftest is imported.

What is missing ends the session before the first test, with the way to get it; nothing is skipped.
``RATEWRIGHT_TEST_DB=sqlite`` runs on an SQLite file (write-ahead log) instead of PostgreSQL.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable, Generator, Iterable
from pathlib import Path
from urllib.parse import quote, urlsplit

import pytest

from kinetics_db.config.processes.failures import ChildFailed, ServerMissing
from kinetics_db.config.processes.guard import Guard
from kinetics_db.config.processes.postgres import ThrowAwayPostgres, find_binaries
from kinetics_db.config.processes.valkey import Valkey, find_server

DATABASE_NAME = "ratewright"
DATABASE_FIXTURES = {
    "db",
    "transactional_db",
    "live_server",
    "django_db_setup",
    "django_db_serialized_rollback",
}
SERVICE_FIXTURES = DATABASE_FIXTURES | {"broker", "own_processes"}


class Services:
    """The servers of this test process: addresses from the beginning, the servers from the first need."""

    def __init__(self) -> None:
        self.on_sqlite = os.environ.get("RATEWRIGHT_TEST_DB") == "sqlite"
        self.is_xdist_worker = "PYTEST_XDIST_WORKER" in os.environ
        self.postgres: ThrowAwayPostgres | None = None
        find_server()  # what is missing is told before anything is made
        binaries = None if self.on_sqlite or self.is_xdist_worker else find_binaries()
        self.folder = Path(tempfile.mkdtemp(prefix="rw-suite-"))
        self._guard = Guard()
        self._guard.remove_when_orphaned(self.folder)  # also a session that is killed leaves nothing
        self.broker = Valkey(self.folder / "valkey")
        os.environ["RATEWRIGHT_BROKER_URL"] = self.broker.url()
        os.environ["RATEWRIGHT_VAR"] = str(self.folder / "var")
        if self.on_sqlite:
            # Each test process its own file; worker processes of a test are told the same one.
            os.environ["RATEWRIGHT_SQLITE_FILE"] = str(self.folder / "test.sqlite3")
        elif binaries is not None:
            # The workers of pytest-xdist inherit the address and share the server.
            self.postgres = ThrowAwayPostgres(binaries)
            os.environ["RATEWRIGHT_DATABASE_URL"] = self.postgres.url(DATABASE_NAME)

    def start(self) -> None:
        self.start_shared()
        if not self.broker.is_running:
            self.broker.start()

    def start_shared(self) -> None:
        """Only what the workers of pytest-xdist share."""
        if self.postgres is not None and not self.postgres.is_running:
            self.postgres.start()

    def remove(self) -> None:
        if self.postgres is not None:
            self.postgres.remove()
        self.broker.stop()
        shutil.rmtree(self.folder, ignore_errors=True)
        self._guard.close()


services: Services | None = None


def database_url(name: str) -> str:
    """Address of another database on the session's PostgreSQL."""
    parts = urlsplit(os.environ["RATEWRIGHT_DATABASE_URL"])
    return f"{parts.scheme}://{parts.netloc}/{quote(name)}?{parts.query}"


@pytest.hookimpl(wrapper=True)
def pytest_load_initial_conftests(early_config: pytest.Config) -> Generator[None, None, None]:
    """Put the servers' addresses into the environment before pytest-django reads the settings."""
    global services
    try:
        services = Services()
    except ServerMissing as error:
        raise pytest.UsageError(str(error)) from error
    early_config.add_cleanup(services.remove)
    yield


@pytest.hookimpl(tryfirst=True)
def pytest_sessionstart(session: pytest.Session) -> None:
    if services is not None and session.config.getoption("numprocesses", None):
        _start_or_end(services.start_shared)


@pytest.hookimpl(trylast=True)
def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """On SQLite leave out what is about PostgreSQL; it is counted as deselected."""
    if services is None or not services.on_sqlite:
        return
    left_out = [item for item in items if item.get_closest_marker("postgresql")]
    if left_out:
        config.hook.pytest_deselected(items=left_out)
        items[:] = [item for item in items if item not in left_out]


def pytest_collection_finish(session: pytest.Session) -> None:
    """Start the servers when a chosen test needs them, so that tests of the engine do not wait for any."""
    if services is not None and not session.config.option.collectonly and _any_needs_services(session.items):
        _start_or_end(services.start)


def _any_needs_services(items: Iterable[pytest.Item]) -> bool:
    return any(
        item.get_closest_marker("django_db")
        or item.get_closest_marker("processes")
        or SERVICE_FIXTURES.intersection(getattr(item, "fixturenames", ()))
        or hasattr(getattr(item, "cls", None), "databases")
        for item in items
    )


def _start_or_end(start: Callable[[], None]) -> None:
    try:
        start()
    except (ChildFailed, ServerMissing) as error:
        pytest.exit(f"A server for the suite did not start. {error}", returncode=4)


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_runtest_makereport(
    item: pytest.Item, call: pytest.CallInfo[None]
) -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """A skipped test is a failed one: what the suite promises it also runs."""
    report = yield
    if report.skipped and not hasattr(report, "wasxfail"):
        report.outcome = "failed"
        report.longrepr = f"{item.nodeid} was skipped, which this suite does not allow: {report.longrepr}"
    return report


def pytest_report_header(config: pytest.Config) -> list[str]:
    if services is None:
        return []
    database = "SQLite" if services.on_sqlite else None
    if services.postgres is not None:
        database = (
            f"PostgreSQL {services.postgres.binaries.major_version} ({services.postgres.binaries.folder})"
        )
    return [f"services: {database or 'PostgreSQL of the session'}, {find_server().name} ({find_server()})"]
