"""What really happens in an invented laboratory."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from kinetics_db.demo.invented.plan import Plan
from kinetics_db.demo.invented.reality import what_happened
from kinetics_db.runs.entry import Amount
from tests.demo.another import CONSTANTS, PLAN, TRUTH


def without_errors(plan: Plan) -> Plan:
    """The plan with perfect balances, flasks, pipettes, bottles and an instrument without noise."""

    def exact(amount: Amount) -> Amount:
        return replace(amount, uncertainty=0.0)

    return replace(
        plan,
        noise=0.0,
        bottles=tuple(replace(b, purity_u=0.0) for b in plan.bottles),
        solutions=tuple(replace(s, weighed=exact(s.weighed), volume=exact(s.volume)) for s in plan.solutions),
        runs=tuple(
            replace(run, additions=tuple(replace(a, amount=exact(a.amount)) for a in run.additions))
            for run in plan.runs
        ),
    )


def test_without_any_error_the_first_step_decays_as_its_closed_form() -> None:
    for export in what_happened(without_errors(PLAN), TRUTH, 1):
        start = 0.060 * 0.97 / 120.0 / 0.005
        decay = np.exp(-CONSTANTS[export.run.celsius]["k1"] * export.times)
        pinol = export.integrals[:, export.columns.index("pinol")]
        np.testing.assert_allclose(pinol, export.run.gain * 2 * start * decay, rtol=1e-6)


def test_without_any_error_the_standard_has_its_nominal_concentration() -> None:
    for export in what_happened(without_errors(PLAN), TRUTH, 1):
        nominal = 1.19 * 0.995 / 118.0 / 0.010 * 0.0005 / 0.005
        np.testing.assert_allclose(export.integrals[:, 0], export.run.gain * 6 * nominal, rtol=1e-12)


def test_the_same_seed_gives_the_same_integrals_and_another_gives_others() -> None:
    first, again, other = (what_happened(PLAN, TRUTH, seed) for seed in (3, 3, 4))
    np.testing.assert_array_equal(first[2].integrals, again[2].integrals)
    assert not np.array_equal(first[0].integrals, other[0].integrals)


def test_runs_that_used_one_solution_share_its_error() -> None:
    exact = without_errors(PLAN)
    ether = next(s for s in exact.solutions if s.code == "ether 1")
    erring = replace(ether, weighed=replace(ether.weighed, uncertainty=0.06))
    plan = replace(exact, solutions=tuple(erring if s.code == "ether 1" else s for s in exact.solutions))
    factors = [
        export.integrals[0, 0] / true.integrals[0, 0]
        for export, true in zip(what_happened(plan, TRUTH, 5), what_happened(exact, TRUTH, 5), strict=True)
    ]
    assert abs(factors[0] - 1.0) > 1e-3
    np.testing.assert_allclose(factors, factors[0], rtol=1e-12)


def test_every_run_errs_at_its_own_balance() -> None:
    exact = without_errors(PLAN)
    runs = tuple(
        replace(
            run, additions=(replace(run.additions[0], amount=Amount(60.0, "mg", 1.0)), *run.additions[1:])
        )
        for run in exact.runs
    )
    first = [
        export.integrals[0, export.columns.index("pinol")] / true.integrals[0, export.columns.index("pinol")]
        for export, true in zip(
            what_happened(replace(exact, runs=runs), TRUTH, 5), what_happened(exact, TRUTH, 5), strict=True
        )
    ]
    assert len({round(factor, 9) for factor in first}) == len(first)


def test_the_scatter_of_an_integral_is_the_stated_noise() -> None:
    exact = without_errors(PLAN)
    clean = what_happened(exact, TRUTH, 0)
    noisy = [what_happened(replace(exact, noise=PLAN.noise), TRUTH, seed) for seed in range(30)]
    scaled = [
        (export.integrals - true.integrals) / export.noise
        for exports in noisy
        for export, true in zip(exports, clean, strict=True)
    ]
    values = np.concatenate([s[np.isfinite(s)] for s in scaled])
    assert abs(np.std(values) - 1.0) < 5 / np.sqrt(2 * values.size)


def test_a_cell_that_the_instrument_left_empty_is_missing() -> None:
    (export,) = (e for e in what_happened(PLAN, TRUTH, 1) if e.run.code == "c")
    assert np.argwhere(np.isnan(export.integrals)).tolist() == [[3, export.columns.index("quinal")]]


def test_a_standard_with_an_error_of_its_own_is_refused() -> None:
    run = PLAN.runs[0]
    erring = tuple(
        replace(a, amount=replace(a.amount, uncertainty=1.0)) if a.source == "ether 1" else a
        for a in run.additions
    )
    with pytest.raises(ValueError, match="run a needs one addition of ether"):
        replace(PLAN, runs=(replace(run, additions=erring),))
