"""Curves at new conditions, with the uncertainty that the fitted constants carry into them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from kinetics_db.engine.conditions import Conditions
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.simulation.curves import Curves
from kinetics_db.engine.simulation.reference import simulate
from kinetics_db.errors import InvalidInput


@dataclass(frozen=True, eq=False)
class PredictedCurves:
    """Predicted concentrations.

    Attributes
    ----------
    curves : Curves
    standard_uncertainty : ndarray, shape (n, s), mol/L, from the fitted constants alone; zero where they have
        no effect
    """

    curves: Curves
    standard_uncertainty: NDArray[np.float64]


def predict_curves(
    network: Network,
    *,
    constants: Mapping[str, float],
    fitted: Sequence[str],
    covariance: NDArray[np.float64],
    positive: Sequence[bool],
    start: Mapping[str, float],
    times: ArrayLike,
    temperature: float | None = None,
) -> PredictedCurves:
    """Curves with standard uncertainties by the delta method (JCGM 100:2008, 5.2.2).

    Parameters
    ----------
    constants : every constant of the network, fitted or held
    fitted : names of those that were fitted, in the order of ``covariance``
    covariance : ndarray, shape (p, p), on the fitted scale
    positive : for each fitted constant, whether its fitted scale is ln(value)
    start : mol/L by species
    times : shape (n,), s
    temperature : K

    Raises
    ------
    InvalidInput
        when the covariance is not finite (a constant was not determined) or its shape does not fit, and for
        all that `simulate` refuses.
    """
    shape = (len(fitted), len(fitted))
    if covariance.shape != shape or not np.isfinite(covariance).all():
        raise InvalidInput(
            "the constants' covariance is not known",
            field="covariance",
            cure="a fit in which every constant that is not held is determined",
        )
    curves = simulate(
        network,
        constants=constants,
        start=start,
        times=times,
        conditions=Conditions(temperature=temperature),
        sensitivities_to=tuple(fitted),
    )
    scale = np.array([constants[name] if log else 1.0 for name, log in zip(fitted, positive, strict=True)])
    jacobian = curves.sensitivities * scale if fitted else np.zeros((*curves.values.shape, 0))
    variance = np.einsum("nsp,pq,nsq->ns", jacobian, covariance, jacobian)
    return PredictedCurves(curves, np.sqrt(np.maximum(variance, 0.0)))
