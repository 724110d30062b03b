"""Which of several descents is the outcome, and what the caller hears while it is put together."""

from types import SimpleNamespace

import numpy as np
import pytest

from kinetics_db.engine import fit_globally, parse_mechanism
from kinetics_db.engine.fitting import global_fit
from kinetics_db.engine.fitting.descent import Descent
from kinetics_db.engine.fitting.problem import Charge, Constant, Experiment, Settings


class Descender:
    """Ends the descents as told, one after another."""

    def __init__(self, *ends):
        self.ends = list(ends)

    def descend(self, theta):
        status, cost = self.ends.pop(0)
        point = None if cost is None else SimpleNamespace(cost=cost, theta=theta)
        return Descent(status, f"{status} at {theta[0]:g}", point)


def descended(*ends):
    descender = Descender(*ends)
    best, kept = global_fit._descend(descender, (np.array([float(i)]) for i in range(len(ends))))
    return best, kept, descender.ends


def test_the_lowest_end_point_wins_and_the_first_of_equal_ones():
    best, kept, _ = descended(("converged", 3.0), ("converged", 1.0), ("converged", 1.0), ("converged", 2.0))
    assert best.message == "converged at 1"
    assert [end.cost for end in kept] == [3.0, 1.0, 1.0, 2.0]


def test_a_start_that_leads_nowhere_is_passed_over():
    best, kept, _ = descended(("cannot start", None), ("not converged", 2.0), ("converged", 5.0))
    assert best.status == "not converged"
    assert [end.cost for end in kept] == [5.0]


def test_where_no_start_leads_anywhere_the_first_says_why():
    assert descended(("cannot start", None), ("cannot start", None))[0].message == "cannot start at 0"


@pytest.mark.parametrize("cost", [None, 0.5, 9.0])
def test_a_stopped_descent_is_the_last_and_leaves_the_fit_stopped(cost):
    best, _, left = descended(("converged", 1.0), ("stopped", cost), ("converged", 0.1))
    assert best.status == "stopped"
    assert best.point.cost == (0.5 if cost == 0.5 else 1.0)
    assert len(left) == 1
    if cost != 0.5:
        assert best.message == "stopped at 1 before all starts were tried"


def test_a_descent_stopped_before_anything_was_found_is_stopped():
    best, _, _ = descended(("cannot start", None), ("stopped", None))
    assert best.status == "stopped" and best.point is None


def test_the_caller_hears_of_work_while_the_outcome_of_many_points_is_put_together(monkeypatch):
    times = np.linspace(0.01, 5.0, 9000)
    values = np.exp(-0.5 * times)[:, None] + 0.01 * np.random.default_rng(1).normal(size=(9000, 1))
    run = Experiment("r", (Charge("A", 1.0),), times, ("A",), values)
    asked, during = [], []
    report = global_fit.report

    def watched(*given, **more):
        before = len(asked)
        outcome = report(*given, **more)
        during.append(len(asked) - before)
        return outcome

    monkeypatch.setattr(global_fit, "report", watched)
    fit = fit_globally(
        parse_mechanism("A --k--> B"),
        [run],
        [Constant("k", 0.4)],
        settings=Settings(error_model="one sigma"),
        should_stop=lambda: bool(asked.append(1)),
    )
    assert fit.status == "converged", fit.message
    assert during[0] >= 10  # blocks of about 2000 points, passed twice for each of two decompositions
