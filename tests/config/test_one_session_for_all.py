"""Two real web servers of a lab, as docker-compose.yml starts them, over one PostgreSQL and one Valkey."""

from __future__ import annotations

import http.client
import os
import re
import subprocess
from collections.abc import Iterator
from typing import TYPE_CHECKING
from urllib.parse import urlsplit

import httpx
import pytest
from django.db import connection

from kinetics_db.config.environment import cache_url_beside
from kinetics_db.web import throttle
from tests.factories.people import make_user
from tests.services.deployment import command_of, health_command_of
from tests.services.processes import CHECKOUT, TestProcesses, free_port, wait_until

if TYPE_CHECKING:
    from kinetics_db.config.processes.valkey import Valkey

pytestmark = [pytest.mark.processes, pytest.mark.postgresql, pytest.mark.django_db(transaction=True)]
PASSWORD = "a long password 1"


@pytest.fixture
def servers(own_processes: TestProcesses, broker: Valkey) -> list[str]:
    """Addresses of two web servers."""
    make_user("mira")
    own_processes.environment["RATEWRIGHT_CACHE_URL"] = cache_url_beside(broker.url())
    addresses = []
    for processes in ("2", "1"):
        port = free_port()
        own_processes.start_command(
            "web",
            command_of("web"),
            {
                "RATEWRIGHT_ROLE": "web",
                "RATEWRIGHT_BIND": f"127.0.0.1:{port}",
                "RATEWRIGHT_WEB_PROCESSES": processes,
            },
            is_ready=lambda written, port=port: "Listening at: " in written and answers(port),
        )
        addresses.append(f"http://127.0.0.1:{port}")
    return addresses


def answers(port: int) -> bool:
    asked = http.client.HTTPConnection("127.0.0.1", port, timeout=2)
    try:
        asked.request("GET", "/api/v1/health/")
        return asked.getresponse().status == 200
    except OSError:
        return False
    finally:
        asked.close()


@pytest.fixture
def browser() -> Iterator[httpx.Client]:
    with httpx.Client(follow_redirects=False, timeout=20) as client:
        yield client


def post_form(browser: httpx.Client, address: str, path: str, page: str, **fields: str) -> httpx.Response:
    """Send a form as a browser does: with the token of the page on which it stands."""
    html = browser.get(f"{address}{page}").text
    token = re.search(r'name="csrfmiddlewaretoken" value="([^"]+)"', html)
    assert token, html[:500]
    return browser.post(
        f"{address}{path}",
        data={"csrfmiddlewaretoken": token[1], **fields},
        headers={"Origin": address},
    )


def log_in(browser: httpx.Client, address: str, password: str = PASSWORD) -> int:
    return post_form(browser, address, "/login/", "/login/", username="mira", password=password).status_code


def test_who_logs_in_at_one_server_is_known_at_the_other_and_out_at_both(
    servers: list[str], browser: httpx.Client, broker: Valkey
) -> None:
    one, other = servers
    assert log_in(browser, one) == 302
    assert browser.get(f"{other}/").status_code == 200
    session = browser.cookies["sessionid"]
    assert post_form(browser, other, "/logout/", "/").status_code == 302
    browser.cookies.set("sessionid", session, domain=urlsplit(one).hostname or "")
    assert browser.get(f"{one}/").status_code == 302, "nor does the old cookie help"

    broker.stop()
    assert log_in(browser, other) == 302, "people can work while Redis is away"
    assert browser.get(f"{one}/").status_code == 200


def test_failed_logins_are_counted_over_all_servers(servers: list[str], browser: httpx.Client) -> None:
    for i in range(throttle.MOST_FAILURES):
        assert log_in(browser, servers[i % 2], "wrong") == 200
    assert [log_in(browser, server) for server in servers] == [429, 429]


def test_every_process_has_connections_of_its_own_and_the_server_says_that_it_is_well(
    servers: list[str], own_processes: TestProcesses
) -> None:
    for _ in range(20):
        assert httpx.get(f"{servers[0]}/api/v1/health/").status_code == 200
    with connection.cursor() as cursor:
        cursor.execute(
            "SELECT count(*) FROM pg_stat_activity WHERE datname = current_database() AND pid <> pg_backend_pid()"
        )
        assert cursor.fetchone()[0] >= 2, "at least one a server, which lives on between requests"
    bind = urlsplit(servers[0]).netloc
    environment = {**os.environ, **own_processes.environment, "RATEWRIGHT_HOSTS": "127.0.0.1"}

    def ask(at: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            health_command_of("web"),
            cwd=CHECKOUT,
            env={**environment, "RATEWRIGHT_BIND": at},
            capture_output=True,
            text=True,
            check=False,
            timeout=30,
        )

    well = ask(bind)
    assert (well.returncode, well.stdout) == (0, "/api/v1/health/ answers 200\n"), well.stderr
    own_processes.stop_all()
    wait_until(lambda: not answers(int(bind.rpartition(":")[2])), within=10, what="the server is gone")
    gone = ask(bind)
    assert gone.returncode == 1 and "does not answer" in gone.stderr
