"""The cache that a lab's web processes share: one count, one session, and a way on while Redis is away."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import pytest
import redis
from django.core.cache import cache, caches

from kinetics_db.config import caches as shared
from kinetics_db.config.environment import cache_url_beside
from kinetics_db.web import throttle

if TYPE_CHECKING:
    from kinetics_db.config.processes.valkey import Valkey


@pytest.fixture
def server(broker: Valkey, settings: Any) -> Iterator[Valkey]:
    """The suite's Valkey, holding the caches as in a lab."""
    settings.CACHES = shared.shared_caches(cache_url_beside(broker.url()))
    yield broker
    cache._instead.clear()  # type: ignore[attr-defined]


def tries(count: int, *, account: str = "mira") -> list[bool]:
    return [throttle.begin_try(account=account, address="192.0.2.1") for _ in range(count)]


def held(server: Valkey) -> redis.Redis:
    return redis.Redis(unix_socket_path=str(server.socket), db=1)


def test_what_is_cached_is_beside_the_queue_and_not_in_it(server: Valkey) -> None:
    cache.set("curve", [1.0, 2.0], 60)
    assert cache.get("curve") == [1.0, 2.0]
    with held(server) as beside, redis.Redis(unix_socket_path=str(server.socket)) as queue:
        assert (beside.dbsize(), queue.dbsize()) == (1, 0)


def test_of_forty_tries_at_once_from_as_many_processes_ten_are_let_through(server: Valkey) -> None:
    together = threading.Barrier(40)
    answers: list[bool] = []

    def attempt() -> None:  # every thread has a client of its own, as every process has
        together.wait()
        answers.extend(tries(1))

    threads = [threading.Thread(target=attempt) for _ in range(40)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(answers) == [False] * (40 - throttle.MOST_FAILURES) + [True] * throttle.MOST_FAILURES


def test_a_count_ends_with_its_window(server: Valkey) -> None:
    tries(3)
    with held(server) as beside:
        (key,) = beside.keys()
        assert 0 < beside.ttl(key) <= throttle.WINDOW_SECONDS


def test_a_count_whose_window_ended_between_two_steps_of_redis_does_not_last_for_ever(
    server: Valkey, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(
        shared.SharedCache,
        "incr",
        lambda self, key: self._cache.get_client(write=True).incr(self.make_key(key)),
    )
    monkeypatch.setattr(shared.SharedCache, "add", lambda *_args, **_more: False)
    assert tries(1) == [True]
    with held(server) as beside:
        (key,) = beside.keys()
        assert 0 < beside.ttl(key) <= throttle.WINDOW_SECONDS


def test_while_redis_is_away_tries_are_counted_in_the_process_and_nobody_waits(
    server: Valkey, caplog: pytest.LogCaptureFixture
) -> None:
    assert tries(4) == [True] * 4
    server.stop()
    began = time.monotonic()
    assert tries(throttle.MOST_FAILURES + 2) == [True] * throttle.MOST_FAILURES + [False] * 2
    throttle.forget(account="mira", address="192.0.2.1")
    assert tries(1) == [True]
    assert time.monotonic() - began < 3.0
    assert caplog.text.count("the shared cache does not answer") == 1, "said once, not for every question"


def test_when_redis_is_back_it_is_asked_again(server: Valkey, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(shared, "PAUSE_SECONDS", 0.0)
    server.stop()
    assert cache.get("a", "nothing") == "nothing"
    server.start()
    cache.set("a", 1, 60)
    with held(server) as beside:
        assert beside.dbsize() == 1


def test_a_restart_of_redis_between_two_requests_is_not_noticed(
    server: Valkey, caplog: pytest.LogCaptureFixture
) -> None:
    cache.set("a", "kept", 60)
    server.stop()
    server.start()
    assert cache.get("a") == "kept"
    assert "does not answer" not in caplog.text


def calls(copies: Any) -> dict[str, Any]:
    return {
        "get": copies.get("s", "none"),
        "set": copies.set("s", {"who": 1}, 60),
        "get again": copies.get("s", "none"),
        "has": "s" in copies,
        "delete": copies.delete("s"),
    }


def test_copies_of_sessions_are_shared_or_not_kept_at_all(server: Valkey) -> None:
    copies = caches["sessions"]
    assert calls(copies) == {
        "get": "none", "set": None, "get again": {"who": 1}, "has": True, "delete": True,
    }  # fmt: skip
    server.stop()
    assert calls(copies) == {
        "get": "none", "set": None, "get again": "none", "has": False, "delete": False,
    }  # fmt: skip


@pytest.mark.parametrize("asked", [None, 14 * 86_400, 60])
def test_a_copy_of_a_session_lasts_minutes_whatever_is_asked(server: Valkey, asked: int | None) -> None:
    caches["sessions"].set("s", {"who": 1}, asked)
    with held(server) as beside:
        (key,) = beside.keys()
        assert 0 < beside.ttl(key) <= min(asked or shared.LONGEST_COPY_SECONDS, shared.LONGEST_COPY_SECONDS)


def test_every_question_has_an_answer_while_redis_is_away(server: Valkey) -> None:
    server.stop()
    assert cache.add("n", 1) is True
    assert cache.incr("n") == 2
    assert cache.touch("n", 60) is True
    assert cache.set_many({"a": 1, "b": 2}) == []
    assert cache.get_many(["a", "b", "c"]) == {"a": 1, "b": 2}
    cache.delete_many(["a"])
    assert "a" not in cache and "b" in cache
    cache.clear()
    assert cache.get("b") is None
