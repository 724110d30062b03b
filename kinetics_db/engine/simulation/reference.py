"""The reference integrator: SciPy's LSODA on the rate equations joined with their sensitivity equations.

The sensitivities S_j = dy/dp_j obey S_j' = J S_j + df/dp_j and are integrated together with y (augmented
equations; Dickinson & Gelinas, J. Comput. Phys. 21 (1976) 123), each multiplied by its parameter's size, so
that they carry the unit of y and share its tolerances. The corrector uses the block-diagonal part of the
augmented Jacobian as a banded matrix, so a step costs no more than linear in the number of parameters.
LSODA: Petzold, SIAM J. Sci. Stat. Comput. 4 (1983) 136; Hindmarsh, ODEPACK (1983).
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.integrate import ODEintWarning, odeint

from kinetics_db.engine.conditions import Conditions
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.simulation.checked import check_simulation
from kinetics_db.engine.simulation.curves import Curves, Outcome, Status
from kinetics_db.engine.simulation.equations import Bound, equations_of

Floats = NDArray[np.float64]

# A species is followed to this fraction of the largest concentration with full relative accuracy.
TRACE = 1e-8
# Multiple of the absolute tolerance below which a concentration is not told from zero by a root of it.
BLUR = 10.0
SENSITIVITY_TRACE = 1e-3  # below 1e-6 rounding in stiff nets costs thousands of steps
_CLOSEST = 8 * float(np.finfo(float).eps)  # relative to the time
_SMALLEST_STEP = 1e-290  # s; the square of its inverse must not overflow
_CLOCK_EVERY = 64  # rate evaluations between looks at the clock
_EVALUATIONS_PER_STEP = 6


def simulate(
    network: Network,
    *,
    constants: Mapping[str, float],
    start: Mapping[str, float],
    times: ArrayLike,
    conditions: Conditions | None = None,
    rtol: float = 1e-8,
    atol: float | Mapping[str, float] | None = None,
    sensitivities_to: Sequence[str] = (),
    max_steps: int = 20_000,
    max_seconds: float = 60.0,
    start_time: float = 0.0,
) -> Curves:
    """Concentrations over time, with exact sensitivities to what is asked for.

    Parameters
    ----------
    network : Network
    constants : every name of `network.constants` with its value, in units of the concentrations and s
    start : start concentrations, mol/L (or any one unit); species left out begin at zero
    times : ndarray, shape (n,), s, non-decreasing, none before `start_time`
    conditions : Conditions, for laws and `where` that use T
    rtol : relative tolerance of a step
    atol : absolute tolerance, one number or by species; by default `rtol` times 1e-8 of the largest
        concentration at the start, so that trace intermediates keep their relative accuracy
    sensitivities_to : names of constants, or ``[X]0`` for the start concentration of species X
    max_steps, max_seconds : bounds on the work; beyond them the outcome is not 'done'
    start_time : s, when the run begins with the start concentrations

    Returns
    -------
    Curves
        Never raises for a failed integration: `Curves.outcome` says how it ended and values beyond
        `outcome.reached` are NaN.

    Raises
    ------
    InvalidInput
        For an unknown or missing constant or species, a start that is negative or not finite, times that
        decrease or are not finite, a missing temperature, tolerances outside 1e-13..0.1.
    """
    checked = check_simulation(
        network,
        constants,
        start,
        times,
        conditions,
        rtol=rtol,
        atol=atol,
        sensitivities_to=sensitivities_to,
        max_steps=max_steps,
        max_seconds=max_seconds,
        start_time=start_time,
    )
    values, sensitivities, outcome = integrate(
        network,
        checked.constants,
        checked.start,
        checked.times,
        temperature=checked.temperature,
        wanted=checked.wanted_constants,
        wanted_starts=checked.wanted_starts,
        rtol=rtol,
        atol=checked.atol,
        max_steps=max_steps,
        max_seconds=max_seconds,
        start_time=start_time,
    )
    order = checked.column_order
    return Curves(
        times=checked.times,
        species=network.species,
        values=values,
        outcome=outcome,
        parameters=tuple(sensitivities_to),
        sensitivities=sensitivities[:, :, order],
        observables={o.name: o.terms for o in network.observables},
    )


class _AbandonedError(Exception):
    """Raised inside a callback when LSODA does not stop by itself after its limit was passed."""


class _Run:
    """The callbacks of one integration, their limits and counts."""

    def __init__(self, bound: Bound, starts: int, max_evaluations: int, deadline: float) -> None:
        s = bound.s
        self.bound = bound
        self.blocks = 1 + bound.p + starts
        self.evaluations = 0
        self.jacobians = 0
        self.reason: Status | None = None
        self.message = ""
        self.max_evaluations = max_evaluations
        self.deadline = deadline
        self._compute = bound.rates if self.blocks == 1 else bound.augmented(starts)
        self._excess = 0
        self._band = np.zeros((2 * s - 1, s))
        i, j = np.meshgrid(np.arange(s), np.arange(s), indexing="ij")
        self._band_rows, self._band_columns = (i - j + s - 1).ravel(), j.ravel()

    def _beyond_limits(self) -> bool:
        """Look at the clock and the count now and then; NaN from here on makes LSODA end soon."""
        if self.reason is None:
            if time.monotonic() > self.deadline:
                self.reason, self.message = "out of time", "the integration took longer than allowed"
            elif self.evaluations > self.max_evaluations:
                self.reason, self.message = "too many steps", "the integration needed more steps than allowed"
        if self.reason is not None:
            self._excess += 1
            if self._excess > 200:
                raise _AbandonedError
        return self.reason is not None

    def rates(self, t: float, u: Floats) -> Floats:
        """d u/dt for LSODA, with or without sensitivities."""
        self.evaluations += 1
        look = self.evaluations % _CLOCK_EVERY == 0 or self.reason is not None
        if look and self._beyond_limits():
            return np.full(u.shape, np.nan)
        try:
            return self._compute(u)
        except (ArithmeticError, ValueError) as error:
            self.reason = "failed"
            self.message = f"a rate law is not defined at t = {t:.6g} s: {error}"
            return np.full(u.shape, np.nan)

    def jacobian(self, t: float, u: Floats) -> Floats:
        """Transposed Jacobian for col_deriv, without sensitivities."""
        self.jacobians += 1
        try:
            return self.bound.jacobian_transposed(u)
        except (ArithmeticError, ValueError):
            return np.full((self.bound.s, self.bound.s), np.nan)

    def band(self, t: float, u: Floats) -> Floats:
        """Block-diagonal part of the augmented Jacobian in LSODA's band form, shape (2s - 1, s * blocks)."""
        self.jacobians += 1
        s = self.bound.s
        try:
            jt = self.bound.jacobian_transposed(u[:s])
        except (ArithmeticError, ValueError):
            return np.full((2 * s - 1, s * self.blocks), np.nan)
        self._band[self._band_rows, self._band_columns] = jt.T.ravel()
        return np.tile(self._band, (1, self.blocks))


def integrate(
    network: Network,
    constants: Floats,
    start: Floats,
    times: Floats,
    *,
    temperature: float | None = None,
    wanted: Sequence[int] = (),
    wanted_starts: Sequence[int] = (),
    rtol: float = 1e-8,
    atol: Floats | None = None,
    max_steps: int = 20_000,
    max_seconds: float = 60.0,
    start_time: float = 0.0,
) -> tuple[Floats, Floats, Outcome]:
    """`simulate` on arrays and positions, without checks, for the inner loop of a fit.

    Parameters
    ----------
    constants : ndarray, shape (len(network.constants),)
    start : ndarray, shape (s,)
    times : ndarray, shape (n,), s, non-decreasing
    wanted, wanted_starts : positions in `network.constants` and `network.species`
    atol : ndarray, shape (s,)

    Returns
    -------
    values : ndarray, shape (n, s)
    sensitivities : ndarray, shape (n, s, p), wanted constants first, then wanted starts
    outcome : Outcome
    """
    equations = equations_of(network)
    s, p = len(equations.species), len(wanted) + len(wanted_starts)
    values = np.full((len(times), s), np.nan)
    sensitivities = np.full((len(times), s, p), np.nan)
    size = np.abs(constants[list(wanted)])
    size[size == 0.0] = 1.0
    times = _at_the_start_or_after(times, start_time)
    stations, where = np.unique(np.concatenate([[start_time], times]), return_inverse=True)
    try:
        with np.errstate(all="ignore"):
            bound = equations.bind(constants, temperature=temperature, wanted=wanted, scales=size)
            largest = _largest(bound, start, float(stations[-1] - stations[0]))
    except (ArithmeticError, ValueError) as error:
        return values, sensitivities, Outcome("failed", f"a constant or rate law is not defined: {error}")
    scales = np.concatenate([size, np.full(len(wanted_starts), largest)])
    if atol is None:
        atol = np.full(s, rtol * TRACE * largest)
    bound.soften_roots(BLUR * atol, largest)
    u0 = np.zeros(s * (1 + p))
    u0[:s] = start
    for block, species in enumerate(wanted_starts):
        u0[s * (1 + len(wanted) + block) + species] = largest
    most = _EVALUATIONS_PER_STEP * max_steps + 2 * len(stations)
    run = _Run(bound, len(wanted_starts), most, time.monotonic() + max_seconds)
    table, outcome = _drive(run, u0, stations, p, rtol, atol, max_steps)
    rows = table[where[1:]]
    values[:] = rows[:, :s]
    sensitivities[:] = (rows[:, s:].reshape(len(times), p, s) / scales[None, :, None]).transpose(0, 2, 1)
    return values, sensitivities, outcome


def _at_the_start_or_after(times: Floats, start_time: float) -> Floats:
    """Times with those that rounding alone parts from the start set to it: LSODA takes no such step."""
    apart = _CLOSEST * np.maximum(np.abs(times), abs(start_time)) + _SMALLEST_STEP
    return np.where(times - start_time <= apart, start_time, times)


def _largest(bound: Bound, start: Floats, duration: float) -> float:
    """The size of the concentrations: that of the start, or of what a feed brings into an empty vessel."""
    largest = float(np.max(start, initial=0.0))
    if largest == 0.0:
        largest = float(np.max(np.abs(bound.rates(start)), initial=0.0)) * duration
    return largest if 0.0 < largest < np.inf else 1.0


def _drive(
    run: _Run, u0: Floats, stations: Floats, p: int, rtol: float, atol: Floats, max_steps: int
) -> tuple[Floats, Outcome]:
    """LSODA over all stations; rows beyond the last good one are NaN."""
    s = run.bound.s
    table = np.full((len(stations), len(u0)), np.nan)
    table[0] = u0
    if len(stations) == 1:
        return table, Outcome("done", reached=float(stations[0]))
    options: dict[str, Any] = {"tfirst": True, "full_output": True, "rtol": rtol, "mxstep": max_steps}
    if p == 0:
        options.update(Dfun=run.jacobian, col_deriv=True, atol=atol)
    else:
        trace = np.tile(atol * (SENSITIVITY_TRACE / TRACE), p)
        options.update(Dfun=run.band, ml=s - 1, mu=s - 1, atol=np.concatenate([atol, trace]))
    try:
        with np.errstate(all="ignore"), warnings.catch_warnings():
            warnings.simplefilter("ignore", ODEintWarning)
            found, info = odeint(run.rates, u0, stations, **options)
    except _AbandonedError:
        return table, _outcome(run, run.reason or "failed", run.message, 0, float(stations[0]))
    status, message = run.reason, run.message
    n_good, steps = len(stations), 0
    successful = info["message"] == "Integration successful."
    if not successful:
        # rows after the interval that failed hold whatever was in memory
        n_good = 1 + int(np.argmax(info["tcur"] < stations[1:]))
        steps = int(info["nst"][n_good - 1])
    else:
        steps = int(info["nst"][-1])
    if not successful and status is None:
        status, message = _why(info["message"], float(info["tcur"][n_good - 1]))
    finite = np.isfinite(found[:n_good]).all(axis=1)
    if not finite.all():
        n_good = int(np.argmin(finite))
        if status is None:
            status, message = "failed", "the concentrations grew beyond all bounds"
    if status is None and steps > max_steps:
        n_good = 1 + int(np.argmax(info["nst"] > max_steps))
        status, message = "too many steps", "the integration needed more steps than allowed"
    table[:n_good] = found[:n_good]
    return table, _outcome(run, status or "done", message, steps, float(stations[n_good - 1]))


def _outcome(run: _Run, status: Status, message: str, steps: int, reached: float) -> Outcome:
    if status != "done":
        message = f"{message} (got as far as t = {reached:.6g} s)"
    return Outcome(status, message, steps, run.evaluations, run.jacobians, reached)


def _why(message: str, reached: float) -> tuple[Status, str]:
    if message.startswith("Excess work"):
        return "too many steps", f"the integration needed more steps than allowed near t = {reached:.6g} s"
    reasons = {
        "Excess accuracy": "the tolerances are below what double precision can give",
        "Repeated error": "no step was small enough for the tolerances",
        "Repeated convergence": "the corrector did not converge",
        "Error weight": "a concentration became zero with a zero absolute tolerance",
        "Illegal input": "the concentrations grew beyond all bounds",
    }
    reason = next((text for start, text in reasons.items() if message.startswith(start)), message)
    return "failed", f"{reason} near t = {reached:.6g} s"
