"""A fit that cannot be set up names every reason."""

from dataclasses import replace

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.problem import (
    Charge,
    Constant,
    Experiment,
    Nuisance,
    Prior,
    Settings,
    StartConcentration,
)
from kinetics_db.errors import InvalidInput

NETWORK = parse_mechanism("A --k--> B")
GOOD = Experiment(
    "run-1",
    (Charge("A", 1.0),),
    np.array([1.0, 2.0, 3.0]),
    ("A",),
    np.array([[0.9], [0.8], [0.7]]),
    np.full((3, 1), 0.01),
)
CONSTANTS = [Constant("k", 0.1)]


def refused(experiments=None, constants=None, **more):
    with pytest.raises(InvalidInput) as caught:
        fit_globally(
            NETWORK,
            [GOOD] if experiments is None else experiments,
            CONSTANTS if constants is None else constants,
            **more,
        )
    return str(caught.value)


@pytest.mark.parametrize(
    ("change", "named"),
    [
        ({"observed": ("Z",)}, "no observable Z"),
        ({"values": np.full((3, 1), np.nan)}, "no point is left"),
        ({"values": np.zeros((2, 1))}, "shape"),
        ({"values": np.array([[0.9], [np.inf], [0.7]])}, "infinite"),
        ({"sigma": None}, "no standard uncertainties"),
        ({"sigma": np.array([[0.01], [0.0], [0.01]])}, "not positive"),
        ({"sigma": np.array([[0.01], [np.nan], [0.01]])}, "without its standard uncertainty"),
        ({"sigma": np.full((3, 2), 0.01)}, "sigma of shape"),
        ({"charges": (Charge("A", -1.0),)}, "-1 of A"),
        ({"charges": (Charge("Q", 1.0),)}, "no species Q"),
        ({"charges": (Charge("A", 1.0, ("stock",)),)}, "unknown nuisance parameter stock"),
        ({"signal_factors": {"A": ("std",)}}, "unknown nuisance parameter std"),
        ({"signal_factors": {"B": ()}}, "B, which is not observed"),
        ({"time_shift": "clock"}, "unknown nuisance parameter clock"),
        ({"times": np.array([1.0, 3.0, 2.0])}, "times"),
        ({"temperature": -1.0}, "-1 K"),
    ],
)
def test_what_is_wrong_with_an_experiment_is_named_with_the_experiment(change, named):
    message = refused([replace(GOOD, **change)])
    assert named in message
    assert "run-1" in message


@pytest.mark.parametrize(
    ("constants", "named"),
    [
        ([], "constant k has no start value"),
        ([Constant("k", 0.1), Constant("q", 1.0)], "no constant q"),
        ([Constant("k", 0.1), Constant("k", 0.2)], "given twice"),
        ([Constant("k", 0.1, lower=1.0, upper=0.5)], "not below its upper bound"),
        ([Constant("k", 0.1, lower=1.0)], "below its lower bound"),
        ([Constant("k", 2.0, upper=1.0)], "above its upper bound"),
        ([Constant("k", 0.0)], "not positive"),
        ([Constant("k", float("nan"))], "not finite"),
        ([Constant("k", 0.1, prior=Prior(0.1, 0.0))], "prior sd"),
        ([Constant("k", 0.1, prior=Prior(-0.1, 1.0))], "prior mean"),
        ([Constant("k", 0.1, scope="in a group", group_by="temperature")], "run-1"),
    ],
)
def test_what_is_wrong_with_a_constant_is_named(constants, named):
    assert named in refused(constants=constants)


@pytest.mark.parametrize(
    ("more", "named"),
    [
        ({"start_concentrations": [StartConcentration("Z", 1.0)]}, "no species Z"),
        ({"start_concentrations": [StartConcentration("A", 0.0)]}, "not positive"),
        ({"nuisances": [Nuisance("w", "run-1", 0.0)]}, "sd 0 of w"),
        ({"nuisances": [Nuisance("w", "run-1", 0.1), Nuisance("w", "x", 0.1)]}, "given twice"),
        ({"nuisances": [Nuisance("k", "run-1", 0.1)]}, "name of another parameter"),
        ({"settings": Settings(error_model="poisson")}, "poisson"),
        ({"settings": Settings(starts=0)}, "1 to 10000"),
        ({"settings": Settings(confidence=1.0)}, "confidence"),
    ],
)
def test_what_is_wrong_with_the_rest_is_named(more, named):
    assert named in refused(**more)


def test_a_nuisance_of_the_wrong_kind_is_named():
    experiment = replace(GOOD, time_shift="clock")
    assert "clock is a factor" in refused([experiment], nuisances=[Nuisance("clock", "run-1", 0.1)])


def test_experiments_must_be_there_and_have_names_of_their_own():
    assert "no experiment" in refused([])
    assert "two experiments are called run-1" in refused([GOOD, GOOD])


def test_more_parameters_than_values_and_priors_are_refused():
    experiment = replace(GOOD, times=np.array([1.0]), values=np.array([[0.9]]), sigma=np.array([[0.01]]))
    message = refused([experiment], start_concentrations=[StartConcentration("A", 1.0)])
    assert "2 parameters" in message and "1 values" in message


def test_a_fit_that_would_not_fit_into_memory_is_refused():
    n = 1_000_000
    runs = [
        replace(
            GOOD,
            name=f"run-{i}",
            times=np.arange(n, dtype=float),
            values=np.broadcast_to(0.5, (n, 1)),
            sigma=np.broadcast_to(0.1, (n, 1)),
        )
        for i in range(6)
    ]
    message = refused(runs, constants=[Constant("k", 0.1, scope="own per run")])
    assert "thin out" in message


def test_a_fit_whose_algebra_would_be_silent_for_too_long_is_refused():
    nuisances = [Nuisance(f"w{i}", "stock", 0.1) for i in range(1500)]
    assert "1501 parameters are too many" in refused(nuisances=nuisances)


def test_a_computed_constant_is_not_fitted():
    network = parse_mechanism("A <--k_f / k_b--> B\nwhere k_b = k_f/K")
    with pytest.raises(InvalidInput, match="k_b is computed"):
        fit_globally(network, [GOOD], [Constant("k_f", 1.0), Constant("K", 1.0), Constant("k_b", 1.0)])


def test_every_problem_is_named_at_once():
    with pytest.raises(InvalidInput) as caught:
        fit_globally(
            NETWORK, [replace(GOOD, observed=("Z",), charges=(Charge("Q", 1.0),))], [Constant("q", -1.0)]
        )
    assert len(caught.value.problems) >= 5


def problems_of(**more):
    with pytest.raises(InvalidInput) as caught:
        fit_globally(NETWORK, [GOOD], more.pop("constants", CONSTANTS), **more)
    return caught.value.problems


NAN = float("nan")


@pytest.mark.parametrize(
    ("field", "values", "accepted"),
    [
        ("seed", [-1, 2**53, 10**400, 1.0, "1", True, None, NAN], "0 to 9007199254740991"),
        ("starts", [0, 1.5, 1.0, 10**9, "2", True, None, NAN, [4]], "1 to 10000"),
        ("max_iterations", [0, 100_001, "many", 2.5, False, None, {}], "1 to 100000"),
        ("max_steps", [0, 10_000_001, "many", 1e6, True, None], "1 to 10000000"),
        ("max_seconds", [0, -1.0, 1e12, float("inf"), NAN, "9", True, None, 10**400], "7 days"),
        ("rtol", [0.0, 1.0, NAN, "x", True, None, []], "1e-13 to 1e-3"),
        ("confidence", [0.0, 1, NAN, "x", True, None], "between 0 and 1"),
        ("start_spread", [1.0, -2.0, 1e12, NAN, "x", True, None], "above 1"),
        ("error_model", ["poisson", None, 3, ["one sigma"], "one sigma\0"], "one sigma per observable"),
    ],
)
def test_a_setting_that_cannot_be_meant_is_refused_by_its_name(field, values, accepted):
    for value in values:
        (problem,) = problems_of(settings=Settings(**{field: value}))
        assert problem.field == field, value
        right_type = "number" in problem.cure or "text" in problem.cure or "characters" in problem.cure
        assert accepted in problem.cure or right_type, (value, problem)


def test_settings_of_the_right_type_but_absurd_say_their_limits():
    for field, value, limits in (
        ("seed", -1, "0 to 9007199254740991"),
        ("starts", 10**9, "1 to 10000"),
        ("max_iterations", 10**6, "1 to 100000"),
        ("max_steps", 10**8, "1 to 10000000"),
        ("max_seconds", 1e12, "above 0 s, up to 604800 s (7 days)"),
    ):
        (problem,) = problems_of(settings=Settings(**{field: value}))
        assert (problem.field, problem.cure) == (field, limits)


def test_a_double_of_numpy_is_a_number_and_whole_numbers_stand_for_floats():
    settings = Settings(rtol=np.float64(1e-8), max_seconds=60)
    fit = fit_globally(NETWORK, [GOOD], [Constant("k", np.float64(0.1), upper=1)], settings=settings)
    assert fit.status == "converged"


def test_a_narrow_float_of_numpy_is_refused_for_it_would_narrow_what_it_meets():
    (problem,) = problems_of(constants=[Constant("k", np.float32(0.1))])
    assert (problem.field, problem.cure) == ("k.start", "a number (int or float)")


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"start": "0.1"}, "k.start"),
        ({"start": True}, "k.start"),
        ({"start": None}, "k.start"),
        ({"start": [0.1]}, "k.start"),
        ({"start": 10**400}, "k.start"),
        ({"start": NAN}, "k"),
        ({"start": float("inf")}, "k"),
        ({"start": 1e200}, "k"),
        ({"lower": "0"}, "k.lower"),
        ({"lower": NAN}, "k"),
        ({"lower": -1.0}, "k"),
        ({"lower": float("-inf")}, "k"),
        ({"upper": False}, "k.upper"),
        ({"upper": NAN}, "k"),
        ({"prior": {"mean": 0.1, "sd": 1.0}}, "k.prior"),
        ({"prior": Prior("0.1", 1.0)}, "k.prior.mean"),
        ({"prior": Prior(0.1, True)}, "k.prior.sd"),
        ({"prior": Prior(NAN, 1.0)}, "k"),
        ({"prior": Prior(0.1, NAN)}, "k"),
        ({"prior": Prior(0.1, float("inf"))}, "k"),
        ({"prior": Prior(0.1, 1e-200)}, "k"),
    ],
)
def test_values_of_constants_and_start_concentrations_that_are_no_usable_numbers_are_named(change, field):
    (problem, *_) = problems_of(constants=[replace(CONSTANTS[0], **change)])
    assert problem.field == field and problem.cure
    start = replace(StartConcentration("A", 1.0), **change)
    (problem, *_) = problems_of(start_concentrations=[start])
    assert problem.field == (field.replace("k.", "A.") if "." in field else "[A]0")


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"name": 7}, "constants.1.name"),
        ({"name": "k\0"}, "constants.1.name"),
        ({"name": ["k"]}, "constants.1.name"),
        ({"scope": None}, "k.scope"),
        ({"scope": ["held"]}, "k.scope"),
        ({"group_by": ["temperature"], "scope": "in a group"}, "k.group_by"),
        ({"starts": [1.0]}, "k.starts"),
        ({"starts": "run-1"}, "k.starts"),
        ({"starts": {"run-1": "0.1"}}, "k.starts.run-1"),
        ({"starts": {"run-1": True}}, "k.starts.run-1"),
        ({"starts": {1: 0.1}}, "k.starts"),
        ({"starts": {"run\0": 0.1}}, "k.starts"),
        ({"starts": {"run-1": NAN}, "scope": "own per run"}, "k"),
        ({"positive": "no"}, "k.positive"),
        ({"positive": None}, "k.positive"),
    ],
)
def test_names_and_choices_of_a_constant_that_are_of_a_wrong_type_are_named(change, field):
    (problem, *_) = problems_of(constants=[replace(CONSTANTS[0], **change)])
    assert problem.field == field and problem.cure


def test_wrong_types_of_species_and_nuisances_are_named():
    assert problems_of(start_concentrations=[StartConcentration(None, 1.0)])[0].field == (
        "start_concentrations.1.species"
    )
    assert problems_of(nuisances=[Nuisance("w", "run-1", "0.1")])[0].field == "w.sd"
    assert problems_of(nuisances=[Nuisance("w", "run-1", NAN)])[0].field == "w"


def test_wrong_settings_and_wrong_types_of_constants_are_named_at_once():
    found = problems_of(constants=[Constant("k", "0.1")], settings=Settings(starts=1.5, rtol="x"))
    assert {p.field for p in found} == {"starts", "rtol", "k.start"}
