"""The suite's own servers and processes: real, separate, killable, and gone afterwards."""

from __future__ import annotations

import http.client
import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING
from urllib.parse import urlsplit

import pytest
import redis

from kinetics_db.config.processes.guard import group_is_running, is_running
from tests.services import plugin
from tests.services.processes import CHECKOUT, RunningProcess, children_of, wait_until

if TYPE_CHECKING:
    from kinetics_db.config.processes.valkey import Valkey

pytestmark = pytest.mark.processes


def all_of(process: RunningProcess) -> list[int]:
    return [process.pid, *process.children()]


@pytest.mark.django_db
def test_the_database_is_the_one_that_was_asked_for() -> None:
    from django.db import connection

    assert plugin.services is not None
    name = str(connection.settings_dict["NAME"])
    if plugin.services.on_sqlite:
        assert connection.vendor == "sqlite"
        assert Path(name).is_file()
        with connection.cursor() as cursor:
            cursor.execute("PRAGMA journal_mode")
            assert cursor.fetchone() == ("wal",)
    else:
        assert connection.vendor == "postgresql"
        suffix = os.environ.get("PYTEST_XDIST_WORKER", "")
        assert name.startswith("test_") and name.endswith(suffix)


def test_the_queue_is_empty_at_the_start_of_a_test_and_outlives_a_restart(broker: Valkey) -> None:
    with redis.Redis(unix_socket_path=str(broker.socket)) as client:
        assert client.dbsize() == 0
        client.set("bell", "rung")
    broker.stop()
    with pytest.raises(redis.ConnectionError), redis.Redis(unix_socket_path=str(broker.socket)) as client:
        client.ping()
    broker.start()
    with redis.Redis(unix_socket_path=str(broker.socket)) as client:
        assert client.get("bell") == b"rung"


@pytest.mark.parametrize("how", ["stop", "kill"])
def test_a_worker_and_its_pool_are_gone_after_it_has_been_ended(
    celery_worker_process: Callable[..., RunningProcess], how: str
) -> None:
    worker = celery_worker_process(concurrency=2)
    pids = all_of(worker)
    assert len(pids) == 3
    assert all(is_running(pid) for pid in pids)
    getattr(worker, how)()
    assert not worker.is_running()
    assert not any(is_running(pid) for pid in pids)


def test_a_worker_replaces_a_killed_child_and_goes_on(
    celery_worker_process: Callable[..., RunningProcess],
) -> None:
    worker = celery_worker_process(concurrency=1)
    (killed,) = worker.kill_children()
    wait_until(
        lambda: worker.children() and killed not in worker.children(),
        within=20,
        what=f"the worker replaces its child; its log:\n{worker.log()}",
    )
    assert worker.is_running()


def test_the_sweeper_runs_until_it_is_stopped(sweeper_process: Callable[..., RunningProcess]) -> None:
    sweeper = sweeper_process(every=0.2)
    time.sleep(3)  # long enough to fail at its first sweeps, if it did
    assert sweeper.is_running(), sweeper.log()
    assert "Traceback" not in sweeper.log()
    sweeper.stop()
    assert not group_is_running(sweeper.pid)


def test_the_web_server_answers_on_a_port_of_its_own_until_it_is_killed(
    web_server_process: Callable[..., tuple[RunningProcess, str]],
) -> None:
    server, address = web_server_process()
    _, other_address = web_server_process()
    assert address != other_address
    pids = all_of(server)
    server.kill()
    assert not any(is_running(pid) for pid in pids)
    for where, answers in ((address, False), (other_address, True)):
        connection = http.client.HTTPConnection(urlsplit(where).netloc, timeout=5)
        try:
            connection.request("GET", "/api/v1/health/")
            assert answers and connection.getresponse().status == 200
        except ConnectionRefusedError:
            assert not answers
        finally:
            connection.close()


def pytest_of_its_own(folder: Path, code: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run the suite's plugin on one small test file, with other variables."""
    (folder / "test_small.py").write_text(code)
    inherited = {
        key: value for key, value in os.environ.items() if not key.startswith(("RATEWRIGHT_", "PYTEST_"))
    }
    command = [sys.executable, "-m", "pytest", "-q"]
    return subprocess.run(
        [
            *command,
            "--rootdir",
            str(CHECKOUT),
            "-c",
            str(CHECKOUT / "pyproject.toml"),
            str(folder / "test_small.py"),
        ],
        cwd=CHECKOUT,
        env={**inherited, **environment},
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
    )


def test_a_skipped_test_is_a_failed_one(tmp_path: Path) -> None:
    done = pytest_of_its_own(
        tmp_path,
        "import pytest\n\ndef test_lazy():\n    pytest.skip('no server here')\n\ndef test_good():\n    pass\n",
    )
    assert done.returncode == 1, done.stdout
    assert "1 failed, 1 passed" in done.stdout
    assert "was skipped, which this suite does not allow" in done.stdout


def test_what_is_missing_ends_the_session_before_the_first_test(tmp_path: Path) -> None:
    # Nothing on PATH, no version folders, no wheel.
    hide = (
        "from kinetics_db.config.processes import postgres\n"
        "postgres.find_binaries.__kwdefaults__['wheel'] = False\n"
        "postgres.find_binaries.__defaults__ = ('', ())\n"
    )
    (tmp_path / "hide_postgresql.py").write_text(hide)
    done = pytest_of_its_own(
        tmp_path,
        "def test_never_run():\n    assert False\n",
        PYTEST_PLUGINS="hide_postgresql",
        PYTHONPATH=os.pathsep.join([str(tmp_path), str(CHECKOUT)]),
    )
    assert done.returncode == 4, done.stdout + done.stderr
    assert "No PostgreSQL server was found" in done.stderr
    assert "apt install postgresql" in done.stderr
    assert "test_never_run" not in done.stdout


def test_on_sqlite_what_is_about_postgresql_is_deselected_and_counted(tmp_path: Path) -> None:
    code = "import pytest\n\n@pytest.mark.postgresql\ndef test_pg():\n    assert False\n\ndef test_any():\n    pass\n"
    done = pytest_of_its_own(tmp_path, code, RATEWRIGHT_TEST_DB="sqlite")
    assert done.returncode == 0, done.stdout + done.stderr
    assert "1 passed, 1 deselected" in done.stdout


def test_a_session_leaves_no_process_and_no_folder(tmp_path: Path) -> None:
    code = (
        "import os\nfrom pathlib import Path\nfrom tests.services import plugin\n\n"
        "def test_look(broker, db):\n"
        "    services = plugin.services\n"
        "    places = [services.folder, services.broker.socket.parent]\n"
        "    pids = [services.broker.pid]\n"
        "    if services.postgres is not None:\n"
        "        places.append(services.postgres.folder)\n"
        "        pids.append(services.postgres.pid)\n"
        "    assert all(place.exists() for place in places)\n"
        f"    Path({str(tmp_path / 'found')!r}).write_text(' '.join(map(str, [*pids, *places])))\n"
    )
    (tmp_path / "conftest.py").write_text("from tests.conftest import broker\n")
    done = pytest_of_its_own(tmp_path, code)
    assert done.returncode == 0, done.stdout + done.stderr
    found = (tmp_path / "found").read_text().split()
    assert len(found) >= 4
    for word in found:
        assert not (is_running(int(word)) if word.isdigit() else Path(word).exists())


def test_a_killed_session_leaves_no_process_and_no_folder(tmp_path: Path) -> None:
    code = (
        "import os, signal\nfrom pathlib import Path\nfrom tests.services import plugin\n\n"
        "def test_die(broker):\n"
        "    services = plugin.services\n"
        "    places = [services.folder, services.broker.socket.parent]\n"
        f"    Path({str(tmp_path / 'found')!r}).write_text(' '.join(map(str, [services.broker.pid, *places])))\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    (tmp_path / "conftest.py").write_text("from tests.conftest import broker\n")
    assert pytest_of_its_own(tmp_path, code, RATEWRIGHT_TEST_DB="sqlite").returncode == -9
    pid, *places = (tmp_path / "found").read_text().split()
    wait_until(
        lambda: not is_running(int(pid)) and not any(Path(place).exists() for place in places),
        within=20,
        what="the server and the folders of the killed session are gone",
    )


def test_children_of_a_process_are_found() -> None:
    with subprocess.Popen([sys.executable, "-S", "-c", "import time; time.sleep(60)"]) as child:
        assert child.pid in children_of(os.getpid())
        child.kill()
    assert child.pid not in children_of(os.getpid())
