"""Simulations over REST: right, bounded, and never a fault."""

from __future__ import annotations

import time
from typing import Any

import numpy as np
import pytest

from api import simulate
from tests.api.conftest import Lab, Script, problem
from tests.api.study import Asked, fields_of
from tests.factories.people import make_user
from tests.factories.tokens import make_token

DECAY: dict[str, Any] = {
    "text": "A --k--> 2 B\nobserve signal = [A] + 0.5*[B]",
    "constants": {"k": 0.1},
    "start": {"A": 0.2},
    "times": [0, 1, 5.5, 20],
}


def simulated(lab: Lab, **change: Any) -> Any:
    body = {**DECAY, **change}
    return lab.script.post("simulate/", {name: value for name, value in body.items() if value is not ...})


def test_curves_are_those_of_the_closed_form(lab: Lab) -> None:
    body = simulated(lab).json()
    times = np.array(DECAY["times"])
    a = 0.2 * np.exp(-0.1 * times)
    assert body["times"] == [0.0, 1.0, 5.5, 20.0]
    np.testing.assert_allclose(body["species"]["A"], a, rtol=1e-6)
    np.testing.assert_allclose(body["species"]["B"], 2 * (0.2 - a), rtol=1e-6, atol=1e-9)
    np.testing.assert_allclose(body["observables"]["signal"], np.full(4, 0.2), rtol=1e-6)
    assert body["outcome"]["status"] == "done" and body["outcome"]["reached"] == 20.0


def test_a_temperature_counts_in_a_law(lab: Lab) -> None:
    change = {"text": "A --k--> B\nwhere k = a*exp(-1000/T)", "constants": {"a": 1.0}, "temperature": 300}
    body = simulated(lab, **change).json()
    k = np.exp(-1000 / 300)
    np.testing.assert_allclose(body["species"]["A"], 0.2 * np.exp(-k * np.array(DECAY["times"])), rtol=1e-6)
    assert fields_of(problem(simulated(lab, **{**change, "temperature": ...}), 422)) == ["temperature"]
    assert fields_of(problem(simulated(lab, **{**change, "temperature": -1}), 422)) == ["temperature"]


@pytest.mark.django_db
def test_a_stored_version_is_simulated_for_those_who_may_see_it() -> None:
    asked = Asked.fresh(starts=(10.0,))
    body = {**DECAY, "version": asked.study.version.pk}
    del body["text"]
    assert asked.read_only().post("simulate/", body).json()["species"]["A"][0] == 0.2
    stranger = Script(make_token(make_user())[1])
    assert fields_of(problem(stranger.post("simulate/", body), 422)) == ["version"]
    problem(Script().post("simulate/", body), 401)


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"text": ...}, "text"), ({"version": 1}, "text"), ({"text": "A ->"}, "text"), ({"text": 3}, "text"),
        ({"text": ..., "version": 999_999}, "version"), ({"text": ..., "version": "1"}, "version"),
        ({"constants": ...}, "constants"), ({"constants": {"q": 1}}, "constants"), ({"constants": [1]}, "constants"),
        ({"constants": {"k": "1"}}, "constants.k"), ({"constants": {"k": None}}, "constants.k"),
        ({"constants": {"k": True}}, "constants.k"), ({"constants": {f"k{i}": 1 for i in range(2000)}}, "constants"),
        ({"start": {"A": -1}}, "start"), ({"start": {"Z": 1}}, "start"), ({"start": 1}, "start"),
        ({"times": ...}, "times"), ({"times": []}, "times"), ({"times": [2, 1]}, "times"), ({"times": [-1]}, "times"),
        ({"times": ["a"]}, "times.1"), ({"times": list(range(5001))}, "times"), ({"times": "0 1 2"}, "times"),
        ({"times": [[0, 1]]}, "times.1"), ({"rtol": 1}, "rtol"), ({"rtol": 0}, "rtol"), ({"rtol": "x"}, "rtol"),
        ({"rtol": -1e300}, "rtol"), ({"temperature": "hot"}, "temperature"), ({"seconds": 1}, "seconds"),
    ],
)  # fmt: skip
def test_a_simulation_that_cannot_be_is_refused_with_its_field(
    lab: Lab, change: dict[str, Any], field: str
) -> None:
    assert field in fields_of(problem(simulated(lab, **change), 422))


@pytest.mark.parametrize(
    "body", [b'{"times": [NaN]}', b'{"times": [1e400]}', b'{"times": ' + b"[" * 9000, b"["]
)
def test_a_body_that_is_no_json_is_refused(lab: Lab, body: bytes) -> None:
    problem(lab.script.post("simulate/", body), 400)


def test_an_integration_that_fails_is_an_outcome_with_a_reason(lab: Lab) -> None:
    grows = simulated(lab, text="2 A --k--> 3 A", constants={"k": 1e3}, times=[0, 1e-4, 1.0]).json()
    assert grows["outcome"]["status"] in ("failed", "too many steps") and grows["outcome"]["message"]
    assert grows["species"]["A"][1] > 0.2 and grows["species"]["A"][2] is None


@pytest.mark.parametrize("size", [1e300, -1e300, 1e-300, 0.0])
def test_numbers_of_any_size_get_an_answer(lab: Lab, size: float) -> None:
    for change in ({"constants": {"k": size}}, {"start": {"A": abs(size)}}, {"times": [0, abs(size)]}):
        assert simulated(lab, **change).status_code == 200


def test_a_mechanism_that_takes_too_long_ends_with_an_outcome(
    lab: Lab, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(simulate, "SECONDS", 0.3)
    monkeypatch.setattr(simulate, "STEPS", 10**9)
    pendulum = "A + X --k--> 2 X\nX + Y --k--> 2 Y\nY --q--> nothing\nhold A"
    change = {"text": pendulum, "constants": {"k": 1e3, "q": 1e3}, "start": {"A": 1, "X": 0.5, "Y": 0.1}}
    begun = time.monotonic()
    body = simulated(lab, **change, times=[0, 1e9], rtol=1e-12).json()
    assert body["outcome"]["status"] == "out of time" and "longer than allowed" in body["outcome"]["message"]
    assert time.monotonic() - begun < 5 and body["species"]["X"] == [0.5, None]


@pytest.mark.parametrize(
    "text",
    [
        "\n".join(f"A{i} --k--> A{i + 1}" for i in range(1900)),
        "\n".join(f"A{i} --k--> B{i}" for i in range(200)),
        "\n".join(f"A --{{ k*[A]^{i + 2}/(1 + [B]) }}--> B" for i in range(1900)),
    ],
)
def test_a_mechanism_that_would_fill_the_memory_is_refused(lab: Lab, text: str) -> None:
    found = problem(simulated(lab, text=text), 422)["problems"]
    assert found[0]["field"] == "text" and "too large" in found[0]["message"]


def test_more_values_than_an_answer_holds_are_refused(lab: Lab) -> None:
    text = "\n".join(f"A{i} --k--> A{i + 1}" for i in range(119))
    times = [float(i) for i in range(5000)]
    assert fields_of(problem(simulated(lab, text=text, start={}, times=times), 422)) == ["times"]
    answer = simulated(lab, text=text, start={"A0": 1.0}, times=times[:100])
    assert answer.status_code == 200 and len(answer.json()["species"]) == 120


def test_a_key_changes_nothing_since_nothing_is_kept(lab: Lab) -> None:
    first = lab.script.post("simulate/", DECAY, Idempotency_Key="s-1")
    other = lab.script.post("simulate/", {**DECAY, "times": [0]}, Idempotency_Key="s-1")
    assert first.status_code == other.status_code == 200 and len(other.json()["times"]) == 1
