"""REST over real HTTP, as a script uses it."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from typing import Any

import httpx

BASE = "/api/v1/"
PROBLEM = "application/problem+json"


class RestClient:
    """Sends requests with a token; each says which status it expects."""

    def __init__(self, address: str, secret: str):
        self.address, self.secret = address, secret
        headers = {"Authorization": f"Bearer {secret}"}
        self.http = httpx.Client(base_url=address + BASE, headers=headers, timeout=120)

    def get(self, path: str, status: int = 200, **headers: str) -> httpx.Response:
        return self.send("GET", path, status, headers=_named(headers))

    def post(self, path: str, body: object = None, status: int = 201, **headers: str) -> httpx.Response:
        return self.send("POST", path, status, json={} if body is None else body, headers=_named(headers))

    def patch(self, path: str, changes: object, status: int = 200, **headers: str) -> httpx.Response:
        named = {"Content-Type": "application/merge-patch+json", **_named(headers)}
        return self.send("PATCH", path, status, json=changes, headers=named)

    def upload(self, path: str, name: str, data: bytes, status: int = 201, **texts: str) -> httpx.Response:
        """A form with a file."""
        return self.send("POST", path, status, files={"file": (name, data, "text/csv")}, data=texts)

    def send(self, method: str, path: str, status: int, **more: Any) -> httpx.Response:
        """Any request; ``path`` is below /api/v1/, or the Location of an earlier answer."""
        answer = self.http.request(method, path.removeprefix(BASE), **more)
        assert answer.status_code == status, f"{method} {path}: {answer.status_code} {answer.text[:2000]}"
        if answer.is_error:
            assert answer.headers["Content-Type"] == PROBLEM and answer.json()["status"] == status
        return answer

    def everything(self, path: str) -> list[Any]:
        """The items of a list, page by page along the links."""
        items, pages = [], 0
        while path:
            answer = self.get(path)
            items += answer.json()["items"]
            path = answer.links.get("next", {}).get("url", "").removeprefix(self.address)
            pages += 1
            assert pages < 100
        return items

    def ended(self, location: str, *, within: float = 180.0) -> dict[str, Any]:
        """A fit when it has ended, asked for as often as the server says, with the ETag of the last answer."""
        deadline, known = time.monotonic() + within, ""
        while time.monotonic() < deadline:
            answer = self.http.get(
                location.removeprefix(BASE), headers={"If-None-Match": known} if known else {}
            )
            assert answer.status_code in (200, 304), answer.text
            if "Retry-After" not in answer.headers:
                return dict(answer.json())
            known = answer.headers["ETag"]
            time.sleep(int(answer.headers["Retry-After"]) / 4)
        raise AssertionError(f"{location} has not ended within {within:g} s")

    def close(self) -> None:
        self.http.close()


def all_at_once(count: int, work: Callable[[int], httpx.Response]) -> list[httpx.Response]:
    """Answers of work(0) ... work(count - 1), sent at the same moment."""
    together = threading.Barrier(count)
    answers: dict[int, httpx.Response] = {}

    def one(number: int) -> None:
        together.wait()
        answers[number] = work(number)

    threads = [threading.Thread(target=one, args=(number,)) for number in range(count)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    return [answers[number] for number in range(count)]


def _named(headers: dict[str, str]) -> dict[str, str]:
    """``If_Match="..."`` is the header If-Match."""
    return {name.replace("_", "-"): value for name, value in headers.items()}
