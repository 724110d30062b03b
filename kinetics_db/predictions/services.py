"""Predicting curves from a fit result and keeping them with what they came from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from kinetics_db.accounts.models import User
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.prediction import predict_curves
from kinetics_db.errors import InvalidInput
from kinetics_db.fits.experiments import data_of
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.request import FitRequest
from kinetics_db.mechanisms.selectors import network_of
from kinetics_db.predictions.models import Prediction
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import recording, save_record

MOST_TIMES = 5_000
CAUTION = (
    "A kinetic estimate only. Heat release, gas evolution, toxicity and light exposure need the usual risk "
    "assessment, local rules and a qualified person."
)


def predict_run(
    *,
    user: User,
    result: FitResult,
    start: Mapping[str, float],
    times: Sequence[float],
    temperature: float | None = None,
    place: str = "",
) -> Prediction:
    """Predict a run from a converged result: start concentrations by species, times in s, temperature in K.

    ``place`` names the group or run whose own constants are meant where constants are not the same in all
    runs. Conditions outside the range of the fitted runs are marked as extrapolation.
    """
    fit = result.fit
    require_contributor(user=user, project_id=fit.project_id)
    if result.status != FitResult.Status.CONVERGED:
        raise InvalidInput(f"the fit is {result.status}", field="result", cure="a converged fit")
    if not 1 <= len(times) <= MOST_TIMES:
        raise InvalidInput(f"{len(times)} times", field="times", cure=f"1 to {MOST_TIMES} times in s")
    start = {species: _number(value, f"start.{species}") for species, value in start.items()}
    temperature = None if temperature is None else _number(temperature, "temperature")
    content = result.content
    request = FitRequest.from_plain(fit.content)
    network = network_of(fit.mechanism_version)
    chosen = [
        (i, p)
        for i, p in enumerate(content["parameters"])
        if p["kind"] == "constant" and p["place"] in (None, place)
    ]
    constants = {c.name: c.start for c in request.constants if c.scope == "held"}
    constants.update({p["base"]: p["value"] for _, p in chosen})
    places = sorted({p["place"] for p in content["parameters"] if p["kind"] == "constant" and p["place"]})
    if place and place not in places:
        raise InvalidInput(f"there is no '{place}'", field="place", cure=", ".join(places) or "leave it out")
    missing = [name for name in network.constants if name not in constants]
    if missing:
        raise InvalidInput(
            f"{', '.join(missing)} differ between runs", field="place", cure=f"one of {', '.join(places)}"
        )
    rows = [i for i, _ in chosen]
    covariance = np.array(
        [
            [np.nan if content["covariance"][i][j] is None else content["covariance"][i][j] for j in rows]
            for i in rows
        ]
    ).reshape(len(rows), len(rows))
    predicted = predict_curves(
        network,
        constants=constants,
        fitted=[p["base"] for _, p in chosen],
        covariance=covariance,
        positive=[p["scale"] == "logarithmic" for _, p in chosen],
        start=start,
        times=times,
        temperature=temperature,
    )
    if not predicted.curves.outcome.ok:
        raise InvalidInput(f"the prediction could not be computed: {predicted.curves.outcome.message}")
    outside = _outside(fit, request, start, temperature)
    values = {
        "format": "ratewright/prediction/1",
        "result": result.digest,
        "place": place,
        "start": dict(start),
        "temperature": temperature,
        "times": [float(t) for t in times],
        "species": list(predicted.curves.species),
        "values": predicted.curves.values.tolist(),
        "standard_uncertainty": predicted.standard_uncertainty.tolist(),
        "outside": outside,
        "caution": CAUTION,
    }
    with recording(user=user):
        lock_project(fit.project_id)
        existing = Prediction.objects.filter(result=result, digest=digest(values)).first()
        return existing or save_record(
            Prediction(result=result, extrapolated=bool(outside)),
            user=user,
            content=values,
            parents=[result],
            project_id=fit.project_id,
            label=f"{fit.mechanism_version}",
            verb="predicted",
        )


def _number(value: object, field: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise InvalidInput(f"{value!r:.80} is no number", field=field, cure="a number")
    return float(value)


def _outside(
    fit: Fit, request: FitRequest, start: Mapping[str, float], temperature: float | None
) -> list[str]:
    """In words, which conditions lie outside what the fitted runs covered."""
    data = data_of(fit.dataset)
    found = []
    covered: dict[str, list[float]] = {}
    for run in data.runs:
        totals: dict[str, float] = {}
        for part in run.snapshot["start"]:
            species = request.casting.compounds[part["compound"]]
            if species is not None:
                totals[species] = totals.get(species, 0.0) + part["concentration"]
        for species in {*totals, *start}:
            covered.setdefault(species, []).append(totals.get(species, 0.0))
    for species, value in start.items():
        low, high = min(covered[species]), max(covered[species])
        if not low <= value <= high:
            found.append(f"[{species}]0 {value:g} outside {low:g} to {high:g} mol/L")
    measured = [run.snapshot["temperature"] for run in data.runs if run.snapshot["temperature"]]
    temperatures = [t["value"] for t in measured]
    if temperature is not None and temperatures and not min(temperatures) <= temperature <= max(temperatures):
        found.append(f"{temperature:g} K outside {min(temperatures):g} to {max(temperatures):g} K")
    return found
