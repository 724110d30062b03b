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
        ({"settings": Settings(starts=0)}, "at least 1"),
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
