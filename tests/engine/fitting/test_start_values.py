"""Start values of single groups and runs: taken where they belong, refused where nothing would take them."""

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting.parameters import start_value
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment
from kinetics_db.errors import InvalidInput

NETWORK = parse_mechanism("A --k--> B")


def run(name, temperature):
    times = np.array([1.0, 2.0, 4.0])
    values = np.exp(-0.2 * times)[:, None]
    groups = {"temperature": temperature}
    sigma = np.full((3, 1), 0.01)
    return Experiment(name, (Charge("A", 1.0),), times, ("A",), values, sigma, groups=groups)


RUNS = [run("run-1", "298.15 K"), run("run-2", "308.15 K")]


@pytest.mark.parametrize(
    ("constant", "named", "instead"),
    [
        (
            Constant("k", 0.1, "in a group", group_by="temperature", starts={"298 K": 0.2}),
            "298 K",
            "298.15 K",
        ),
        (
            Constant("k", 0.1, "in a group", group_by="temperature", starts={"run-1": 0.2}),
            "run-1",
            "308.15 K",
        ),
        (Constant("k", 0.1, "own per run", starts={"run-3": 0.2}), "run-3", "run-1, run-2"),
        (Constant("k", 0.1, "held", starts={"run_1": 0.2}), "run_1", "run-1, run-2"),
        (Constant("k", 0.1, starts={"run-1": 0.2}), "run-1", "own per run"),
    ],
)
def test_a_start_value_that_nothing_takes_is_refused_with_the_names_there_are(constant, named, instead):
    with pytest.raises(InvalidInput) as caught:
        fit_globally(NETWORK, RUNS, [constant])
    (problem,) = caught.value.problems
    assert "start values of k" in problem.message and named in problem.message
    assert instead in problem.cure
    assert problem.field == "k"


@pytest.mark.parametrize(
    "constant",
    [
        Constant("k", 0.1, "in a group", group_by="temperature", starts={"308.15 K": 0.3}),
        Constant("k", 0.1, "own per run", starts={"run-2": 0.3}),
        Constant("k", 0.1, "own per run", starts={"308.15 K": 0.3}),
        Constant("k", 0.1, "held", starts={"run-2": 0.3}),
    ],
)
def test_a_start_value_is_taken_by_its_group_or_run_and_the_common_one_by_the_others(constant):
    assert [start_value(constant, e) for e in RUNS] == [0.1, 0.3]
    assert fit_globally(NETWORK, RUNS, [constant]).status == "converged"


def test_a_run_s_own_start_value_goes_before_that_of_its_group():
    constant = Constant("k", 0.1, "own per run", starts={"308.15 K": 0.3, "run-2": 0.4})
    assert start_value(constant, RUNS[1]) == 0.4
