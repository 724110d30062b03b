"""What a global fit gives back, as plain values."""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from kinetics_db.engine.fitting.parameters import Kind

Floats = NDArray[np.float64]
FitStatus = Literal["converged", "stopped", "not converged", "cannot start"]


class ComparedByValue:
    """Equality of dataclasses that hold arrays; fields with compare=False are left out."""

    def __eq__(self, other: object) -> bool:
        if type(other) is not type(self):
            return NotImplemented
        return all(
            _same(getattr(self, f.name), getattr(other, f.name))
            for f in fields(self)  # type: ignore[arg-type]
            if f.compare
        )

    __hash__ = None  # type: ignore[assignment]


def _same(a: Any, b: Any) -> bool:
    if isinstance(a, np.ndarray) or isinstance(b, np.ndarray):
        return np.array_equal(a, b, equal_nan=np.asarray(a).dtype.kind == "f")
    return bool(a == b)


@dataclass(frozen=True)
class SigmaEstimate:
    """A standard uncertainty found by the fit.

    Attributes
    ----------
    observable : str or None, None when common to all points
    value : sqrt(RSS / degrees of freedom), the one that the intervals use; None when less than one degree of
        freedom is left
    maximum_likelihood : sqrt(RSS / n), the one in the likelihood. Neither is below what the tolerance of the
        integrations can tell from zero.
    n_points : int
    degrees_of_freedom : n less the trace of the hat matrix of these points
    """

    observable: str | None
    value: float | None
    maximum_likelihood: float
    n_points: int
    degrees_of_freedom: float


@dataclass(frozen=True)
class FittedParameter:
    """One fitted number with its interval.

    Attributes
    ----------
    name : such as ``k_1``, ``k_1 @ 298.15 K``, ``[S]0 @ run-07``
    base : the constant, ``[species]0`` or nuisance parameter
    kind, place : what it is, and the group or experiment it belongs to (None for all)
    value : in the units of the problem
    standard_error : of the value (first order), None when not determined
    lower, upper : interval of the confidence asked for, None when not determined
    scale : 'logarithmic' (interval symmetric in ln(value)) or 'linear'
    at_bound : the fit pushes it against a bound that was given
    determined : the data and priors fix it
    set_by_prior : its interval is more than 0.8 of its prior's
    prior_mean, prior_sd : mean as a value, sd on the fitted scale
    why_not : reason when not determined
    degrees_of_freedom : effective ones of the standard error, by which the interval is Student's t; None when
        it is normal since all sigmas are known, or when not determined
    """

    name: str
    base: str
    kind: Kind
    place: str | None
    value: float
    standard_error: float | None
    lower: float | None
    upper: float | None
    scale: Literal["logarithmic", "linear"]
    at_bound: bool = False
    determined: bool = True
    set_by_prior: bool = False
    prior_mean: float | None = None
    prior_sd: float | None = None
    why_not: str = ""
    degrees_of_freedom: float | None = None


@dataclass(frozen=True)
class NuisancePull:
    """How far a nuisance parameter went: (fitted - prior mean) / prior sd, on the fitted scale."""

    name: str
    owner: str
    value: float
    pull: float
    experiments: tuple[str, ...]


@dataclass(frozen=True)
class Minimum:
    """One distinct end point of a fit from several starts."""

    cost: float
    found: int
    values: tuple[float, ...]


@dataclass(frozen=True, eq=False)
class ExperimentFit(ComparedByValue):
    """One experiment beside its model.

    Attributes
    ----------
    times : ndarray, shape (n,), s, as given
    observed_names : length m
    observed, model, residuals, standardised : ndarray, shape (n, m); residual = observed - model, divided by
        sigma where standardised; NaN where there is no value
    sigma : ndarray, shape (n, m), tabulated or found by the fit
    rows, columns : ndarray of int, shape (v,), where each valid point stands in the tables
    jacobian : ndarray, shape (v, p), d(model / sigma)/d(fitted-scale parameter) of each valid point
    nuisances : names of the nuisance parameters that this experiment uses
    owner : owner of those that are its run's own
    """

    name: str
    times: Floats
    observed_names: tuple[str, ...]
    observed: Floats
    model: Floats
    residuals: Floats
    sigma: Floats
    standardised: Floats
    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    jacobian: Floats
    nuisances: tuple[str, ...] = ()
    owner: str = ""


@dataclass(frozen=True, eq=False)
class FitOutcome(ComparedByValue):
    """The end of a global fit; not converging is an outcome that keeps its best point.

    Attributes
    ----------
    status, message : how it ended and by which criterion
    cost : what was minimised, `minus_two_log_likelihood` + `minus_two_log_prior`
    minus_two_log_likelihood : r' C^-1 r + ln det C over the valid points, at the profiled sigmas
    minus_two_log_prior : sum of pull^2 + ln(sd^2) over the parameters with a prior, on the fitted scale
    residual_sum_of_squares : of the data, unweighted
    weighted_residual_sum_of_squares : of the standardised residuals
    n_points, n_estimated_sigmas
    sigmas : tuple of SigmaEstimate, empty when tabulated
    parameters : tuple of FittedParameter
    theta : ndarray, shape (p,), the point on the fitted scale
    covariance : ndarray, shape (p, p), fitted scale, names as in `parameters`; NaN where not determined
    prior_precision : ndarray, shape (p,), 1/sd^2 of the priors, zero without
    degrees_of_freedom : n less the trace of the hat matrix
    quantile, quantile_kind : multiplier of a standard error known to `degrees_of_freedom` and the distribution
        it comes from; where sigmas were fitted an interval uses the degrees of freedom of its parameter
    experiments : tuple of ExperimentFit
    pulls : tuple of NuisancePull
    minima : distinct end points of several starts, best first
    iterations, evaluations : accepted steps and evaluations of all experiments
    seconds : wall time, not compared
    """

    status: FitStatus
    message: str
    cost: float = float("nan")
    minus_two_log_likelihood: float = float("nan")
    minus_two_log_prior: float = 0.0
    residual_sum_of_squares: float = float("nan")
    weighted_residual_sum_of_squares: float = float("nan")
    n_points: int = 0
    n_estimated_sigmas: int = 0
    error_model: str = "as tabulated"
    confidence: float = 0.95
    sigmas: tuple[SigmaEstimate, ...] = ()
    parameters: tuple[FittedParameter, ...] = ()
    theta: Floats = field(default_factory=lambda: np.zeros(0))
    covariance: Floats = field(default_factory=lambda: np.zeros((0, 0)))
    prior_precision: Floats = field(default_factory=lambda: np.zeros(0))
    degrees_of_freedom: float = float("nan")
    quantile: float = float("nan")
    quantile_kind: Literal["normal", "Student's t"] = "normal"
    experiments: tuple[ExperimentFit, ...] = ()
    pulls: tuple[NuisancePull, ...] = ()
    minima: tuple[Minimum, ...] = ()
    iterations: int = 0
    evaluations: int = 0
    seconds: float = field(default=0.0, compare=False)

    def parameter(self, name: str) -> FittedParameter:
        """The parameter of that name; KeyError when there is none."""
        for parameter in self.parameters:
            if parameter.name == name:
                return parameter
        raise KeyError(name)
