"""Variables are read with care: what cannot be meant is refused by name."""

from __future__ import annotations

import pytest

from kinetics_db.config.environment import (
    Host,
    WrongEnvironment,
    cache_url,
    cache_url_beside,
    choice,
    count,
    hosts,
    number,
    required,
)

NAME = "RATEWRIGHT_TRIAL"


@pytest.mark.parametrize("value", [None, "", "  "])
def test_a_missing_or_blank_variable_is_asked_for(monkeypatch: pytest.MonkeyPatch, value: str | None) -> None:
    monkeypatch.delenv(NAME, raising=False)
    if value is not None:
        monkeypatch.setenv(NAME, value)
    with pytest.raises(WrongEnvironment, match=f"set {NAME}: "):
        required(NAME)
    assert number(NAME, 2.5) == 2.5
    assert count(NAME, 3) == 3
    assert choice(NAME, "web", ("web", "worker")) == "web"


def test_numbers_are_read(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(NAME, " 12.5 ")
    assert number(NAME, 1.0) == 12.5
    monkeypatch.setenv(NAME, "4")
    assert count(NAME, 1) == 4


@pytest.mark.parametrize("value", ["many", "-1", "nan", "inf", "1,5"])
def test_what_is_no_number_is_refused_by_name(monkeypatch: pytest.MonkeyPatch, value: str) -> None:
    monkeypatch.setenv(NAME, value)
    with pytest.raises(WrongEnvironment, match=f"{NAME} is '{value}', not a number of at least 0"):
        number(NAME, 1.0)


@pytest.mark.parametrize("value", ["0", "1.5"])
def test_a_count_is_whole_and_at_least_one(monkeypatch: pytest.MonkeyPatch, value: str) -> None:
    monkeypatch.setenv(NAME, value)
    with pytest.raises(WrongEnvironment, match=NAME):
        count(NAME, 1)


def test_a_choice_names_what_there_is(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(NAME, "wroker")
    with pytest.raises(WrongEnvironment, match=f"{NAME} is 'wroker'; it takes web or worker"):
        choice(NAME, "web", ("web", "worker"))


def test_hosts_may_have_ports_and_stand_for_all_names_below() -> None:
    found = hosts("ratewright.example.org, lab.example.org:8443 ,.inner.example.org,[::1]:8000,")
    assert found == [
        Host("ratewright.example.org", ""),
        Host("lab.example.org", "8443"),
        Host(".inner.example.org", ""),
        Host("[::1]", "8000"),
    ]
    assert [host.origin("https") for host in found] == [
        "https://ratewright.example.org",
        "https://lab.example.org:8443",
        "https://*.inner.example.org",
        "https://[::1]:8000",
    ]


@pytest.mark.parametrize(
    "text", ["*", "https://lab.example.org", "lab example", "lab:port", "lab.example.org/"]
)
def test_what_is_no_host_is_refused_with_an_example(text: str) -> None:
    with pytest.raises(
        WrongEnvironment, match=r"RATEWRIGHT_HOSTS holds .*, for instance ratewright\.example"
    ):
        hosts(f"ratewright.example.org,{text}")


def test_no_host_at_all_is_refused() -> None:
    with pytest.raises(WrongEnvironment, match="RATEWRIGHT_HOSTS names no host"):
        hosts(" , ")


@pytest.mark.parametrize(
    ("broker", "cache"),
    [
        ("redis://:secret@queue:6379/0", "redis://:secret@queue:6379/1"),
        ("redis://queue", "redis://queue/1"),
        ("rediss://queue:6380/3?ssl_cert_reqs=required", "rediss://queue:6380/4?ssl_cert_reqs=required"),
        ("redis+socket:///run/queue.sock?virtual_host=0", "unix:///run/queue.sock?db=1"),
        ("redis+socket:///run/queue.sock", "unix:///run/queue.sock?db=1"),
    ],
)
def test_the_cache_stands_in_the_next_database_of_the_queues_server(broker: str, cache: str) -> None:
    assert cache_url_beside(broker) == cache


def test_beside_a_queue_of_another_kind_the_cache_has_to_be_named() -> None:
    with pytest.raises(WrongEnvironment, match="set RATEWRIGHT_CACHE_URL"):
        cache_url_beside("amqp://queue//")
    with pytest.raises(WrongEnvironment, match=r"RATEWRIGHT_CACHE_URL must begin with .*, not memcached://"):
        cache_url("memcached://queue")
    assert cache_url("unix:///run/cache.sock?db=2") == "unix:///run/cache.sock?db=2"
