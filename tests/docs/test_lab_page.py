"""The page about a lab installation says the commands that docker-compose.yml has, and that the suite runs."""

from __future__ import annotations

import re
import shlex
import subprocess

import pytest
from django.contrib.auth import get_user_model
from django.core.management import call_command, get_commands

from kinetics_db.config.health import ASKED
from tests.docs.fences import DOCS, blocks_of, blocks_under
from tests.services.deployment import compose, dotenv

PAGE = DOCS / "how-to" / "run-a-lab-installation.md"
SERVICES = compose()["services"]


def lines_under(heading: str) -> list[str]:
    return [line for block in blocks_under(PAGE, heading) for line in block.text.splitlines()]


def every_line() -> list[str]:
    return [line for block in blocks_of(PAGE) for line in block.text.splitlines()]


def without_containers() -> dict[str, tuple[dict[str, str], list[str]]]:
    """Variables and command of each line that starts something, by the service whose command it is."""
    found = {}
    for line in lines_under("Without containers"):
        words = shlex.split(line)
        variables = dict(word.split("=", 1) for word in words if re.match(r"[A-Z_]+=", word))
        command = words[len(variables) :]
        for name, service in SERVICES.items():
            if command and command == service.get("command"):
                found[name] = (variables, command)
    return found


def test_without_containers_the_same_commands_are_run() -> None:
    found = without_containers()
    assert set(found) == {"migrate", "web", "worker", "beat"}
    for name, (variables, _) in found.items():
        environment = SERVICES[name]["environment"]
        assert variables == {key: environment[key] for key in variables}
        assert variables["RATEWRIGHT_ROLE"] == environment["RATEWRIGHT_ROLE"]
    assert found["worker"][0]["REMAP_SIGTERM"] == "SIGQUIT"


def test_every_management_command_of_the_page_exists() -> None:
    commands = set(re.findall(r"manage\.py (\w+)", PAGE.read_text("utf-8")))
    assert {"migrate", "createsuperuser", "sweep"} <= commands <= set(get_commands())


def test_every_service_and_volume_of_the_page_exists() -> None:
    text = PAGE.read_text("utf-8")
    compose_lines = [line for line in every_line() if line.startswith("docker compose")]
    assert compose_lines
    for line in compose_lines:
        words = shlex.split(line)
        named = {
            "exec": lambda words: [next(word for word in words if not word.startswith("-"))],
            "stop": lambda words: words,
            "up": lambda words: [word.split("=")[0] for word in words if "=" in word],
        }.get(words[2], lambda _: [])(words[3:])
        assert set(named) <= set(SERVICES), line
    for volume in compose()["volumes"]:
        assert f"| `{volume}` |" in text
    asked = re.search(r"config\.health (\w+)`, `(\w+)` or `(\w+)`", text)
    assert asked and set(asked.groups()) == set(ASKED)


def test_what_the_page_tells_to_fill_in_is_what_the_example_leaves_blank() -> None:
    text = PAGE.read_text("utf-8")
    for name in ("RATEWRIGHT_SECRET_KEY", "POSTGRES_PASSWORD", "REDIS_PASSWORD"):
        assert dotenv()[name] == "" and f"`{name}`" in text


def test_the_line_that_prints_a_secret_prints_one_that_fits_into_an_address() -> None:
    (line,) = [line for line in every_line() if "token_hex" in line]
    secrets = {
        subprocess.run(["sh", "-c", line], capture_output=True, text=True, check=True).stdout.strip()
        for _ in range(2)
    }
    assert len(secrets) == 2 and all(re.fullmatch(r"[0-9a-f]{64}", secret) for secret in secrets)


@pytest.mark.django_db
def test_the_first_account_can_be_made_as_the_page_says_and_logs_in(
    monkeypatch: pytest.MonkeyPatch, client: object
) -> None:
    monkeypatch.setenv("DJANGO_SUPERUSER_PASSWORD", "a long password 1")
    call_command(
        "createsuperuser", username="admin", email="admin@example.org", interactive=False, verbosity=0
    )
    assert client.login(username="admin", password="a long password 1")  # type: ignore[attr-defined]
    assert get_user_model().objects.get().is_active
