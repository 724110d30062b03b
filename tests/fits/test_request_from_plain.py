"""A fit's request from plain values: whatever JSON can hold is either used or refused with its place."""

from __future__ import annotations

import copy
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from kinetics_db.engine.fitting.problem import Constant, Prior, Settings, StartConcentration
from kinetics_db.errors import InvalidInput
from kinetics_db.fits.casting import Casting
from kinetics_db.fits.request import FitRequest, constants_from_plain

GOOD = FitRequest(
    casting=Casting({"A": "A", "X": None}, {"a": "A"}),
    constants=(Constant("k", 0.1, prior=Prior(0.1, 1.0), starts={"run-1": 0.2}, scope="own per run"),),
    start_concentrations=(StartConcentration("A", 1.0, prior=Prior(1.0, 0.1)),),
    settings=Settings(starts=3),
    without_owners=("stock A",),
).to_plain()


def changed(path: str, value: Any) -> dict[str, Any]:
    """The good request with the entry at a path such as `constants.0.start` replaced."""
    plain = copy.deepcopy(GOOD)
    *steps, last = [int(step) if step.isdigit() else step for step in path.split(".")]
    target: Any = plain
    for step in steps:
        target = target[step]
    target[last] = value
    return plain


def fields_of(plain: Any) -> list[str | None]:
    with pytest.raises(InvalidInput) as refusal:
        FitRequest.from_plain(plain)
    assert all(problem.cure for problem in refusal.value.problems)
    return [problem.field for problem in refusal.value.problems]


def test_the_good_request_reads_back() -> None:
    assert FitRequest.from_plain(GOOD).to_plain() == GOOD


@pytest.mark.parametrize(
    ("path", "value", "field"),
    [
        ("casting", [], "casting"),
        ("casting", None, "casting"),
        ("casting", {"compounds": {}}, "casting.columns"),
        ("casting.compounds", [["A", "A"]], "casting.compounds"),
        ("casting.columns", {"a": 3}, "casting.columns.a"),
        ("casting.columns", {"a\0": "A"}, "casting.columns"),
        ("casting.columns", {"a": {"A": 1}}, "casting.columns.a"),
        ("constants", {"k": 0.1}, "constants"),
        ("constants", "k", "constants"),
        ("constants", 3, "constants"),
        ("constants.0", "k", "constants.1"),
        ("constants.0", None, "constants.1"),
        ("constants.0", {"start": 1.0}, "constants.1.name"),
        ("constants.0", {"name": "k"}, "constants.1.start"),
        ("constants.0.colour", "red", "constants.1"),
        ("constants.0.name", 3, "constants.1.name"),
        ("constants.0.name", "k\0", "constants.1.name"),
        ("constants.0.name", "", "constants.1.name"),
        ("constants.0.start", "0.1", "constants.1.start"),
        ("constants.0.start", [0.1], "constants.1.start"),
        ("constants.0.start", True, "constants.1.start"),
        ("constants.0.start", None, "constants.1.start"),
        ("constants.0.scope", 1, "constants.1.scope"),
        ("constants.0.lower", {}, "constants.1.lower"),
        ("constants.0.prior", "wide", "constants.1.prior"),
        ("constants.0.prior", [0.1, 1.0], "constants.1.prior"),
        ("constants.0.prior", {"mean": 0.1}, "constants.1.prior.sd"),
        ("constants.0.prior.sd", "1", "constants.1.prior.sd"),
        ("constants.0.prior.of", "k", "constants.1.prior"),
        ("constants.0.starts", [0.1], "constants.1.starts"),
        ("constants.0.starts", None, "constants.1.starts"),
        ("constants.0.starts", {"run-1": "0.2"}, "constants.1.starts.run-1"),
        ("constants.0.positive", 1, "constants.1.positive"),
        ("start_concentrations", None, "start_concentrations"),
        ("start_concentrations.0", 1.0, "start_concentrations.1"),
        ("start_concentrations.0.species", ["A"], "start_concentrations.1.species"),
        ("start_concentrations.0.start", False, "start_concentrations.1.start"),
        ("settings", [], "settings"),
        ("settings.starts", "3", "settings.starts"),
        ("settings.starts", 2.5, "settings.starts"),
        ("settings.rtol", {"relative": 1e-8}, "settings.rtol"),
        ("settings.speed", 11, "settings"),
        ("without_owners", "stock A", "without_owners"),
        ("without_owners", [1], "without_owners.1"),
        ("without_owners", ["stock\0"], "without_owners.1"),
    ],
)
def test_an_entry_that_cannot_be_used_is_refused_by_its_place(path: str, value: Any, field: str) -> None:
    assert fields_of(changed(path, value)) == [field]


@pytest.mark.parametrize("name", sorted(GOOD))
def test_an_entry_that_is_missing_is_named(name: str) -> None:
    assert fields_of({key: value for key, value in GOOD.items() if key != name}) == [name]


@pytest.mark.parametrize("plain", [None, [], "request", 3, {}])
def test_what_is_no_request_at_all_is_refused(plain: Any) -> None:
    assert fields_of(plain)


def test_names_that_are_no_text_among_the_entries_are_refused() -> None:
    with pytest.raises(InvalidInput, match="unknown entry 3"):
        constants_from_plain([{"name": "k", "start": 1.0, 3: 4}])  # type: ignore[dict-item]


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=5,
)
PLACES = [
    *GOOD,
    "constants.0",
    "start_concentrations.0",
    "casting.compounds",
    "casting.columns",
    *(f"constants.0.{name}" for name in GOOD["constants"][0]),
    *(f"constants.0.prior.{name}" for name in ("mean", "sd")),
    *(f"start_concentrations.0.{name}" for name in GOOD["start_concentrations"][0]),
    *(f"settings.{name}" for name in GOOD["settings"]),
]


@given(place=st.sampled_from(PLACES), value=JSON)
def test_whatever_stands_in_an_entry_is_used_or_refused_and_never_a_crash(place: str, value: Any) -> None:
    try:
        FitRequest.from_plain(changed(place, value)).to_plain()
    except InvalidInput as refusal:
        assert all(problem.field for problem in refusal.problems)
