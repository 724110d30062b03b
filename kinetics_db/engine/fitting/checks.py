"""What stops a fit before it starts: every problem found, each with its place."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence

import numpy as np

from kinetics_db.engine.fitting.mistyped import mistyped, text
from kinetics_db.engine.fitting.parameters import FARTHEST, ParameterMap, start_keys, start_value
from kinetics_db.engine.fitting.problem import (
    Constant,
    Experiment,
    Nuisance,
    Prior,
    Settings,
    StartConcentration,
)
from kinetics_db.engine.fitting.residuals import valid_points
from kinetics_db.engine.network.model import Network
from kinetics_db.engine.simulation.equations import equations_of
from kinetics_db.errors import InvalidInput, Problem

LARGEST_JACOBIAN = 15_000_000  # values times parameters; keeps a fit below about 1 GB
# The singular values of so many take seconds, in which nobody hears of progress: well below a background job's lease.
MOST_PARAMETERS = 1500
LARGEST_SIZE = 1e100  # of a start or prior, so that no square or product of it overflows
LONGEST_SECONDS = 7 * 86_400
ERROR_MODELS = ("as tabulated", "one sigma", "one sigma per observable")
WHOLE_NUMBERS: Mapping[str, tuple[str, int, int]] = {
    "starts": ("a number of starts", 1, 10_000),
    "seed": ("a seed", 0, 2**53 - 1),  # the largest that every reader of JSON keeps
    "max_iterations": ("a number of iterations", 1, 100_000),
    "max_steps": ("a number of steps", 1, 10_000_000),
}
NUMBERS: Mapping[str, tuple[str, Callable[[float], bool], str]] = {
    "confidence": ("a confidence", lambda value: 0 < value < 1, "between 0 and 1"),
    "rtol": ("a relative tolerance", lambda value: 1e-13 <= value <= 1e-3, "1e-13 to 1e-3"),
    "start_spread": ("a start spread", lambda value: 1 < value <= FARTHEST, f"above 1, up to {FARTHEST:g}"),
    "max_seconds": (
        "a time limit in s",
        lambda value: 0 < value <= LONGEST_SECONDS,
        f"above 0 s, up to {LONGEST_SECONDS} s (7 days)",
    ),
}


def check_fit(
    network: Network,
    experiments: Sequence[Experiment],
    constants: Sequence[Constant],
    starts: Sequence[StartConcentration],
    nuisances: Sequence[Nuisance],
    settings: Settings,
) -> None:
    """InvalidInput with everything that keeps the fit from starting."""
    in_settings = list(_settings(settings))
    # values of a wrong type come first: nothing can be compared with them
    wrong_types = list(_wrong_types(constants, starts, nuisances))
    if wrong_types:
        raise InvalidInput([*in_settings, *wrong_types])
    problems = [
        *in_settings,
        *_constants(network, experiments, constants),
        *_starts(network, starts),
        *_nuisances(nuisances),
        *_experiments(network, experiments, nuisances, settings),
    ]
    if not problems:
        problems = list(_counts(network, experiments, constants, starts, nuisances, settings))
    if problems:
        raise InvalidInput(problems)


def _wrong_types(
    constants: Sequence[Constant], starts: Sequence[StartConcentration], nuisances: Sequence[Nuisance]
) -> Iterator[Problem]:
    for i, constant in enumerate(constants, start=1):
        yield from mistyped(constant, _place(constant.name, f"constants.{i}"))
    for i, start in enumerate(starts, start=1):
        yield from mistyped(start, _place(start.species, f"start_concentrations.{i}"))
    for i, nuisance in enumerate(nuisances, start=1):
        yield from mistyped(nuisance, _place(nuisance.name, f"nuisances.{i}"))


def _place(name: str, position: str) -> str:
    return position if any(text(name, position)) else name


def _settings(settings: Settings) -> Iterator[Problem]:
    wrong = list(mistyped(settings, ""))
    yield from wrong
    unusable = {problem.field for problem in wrong}
    if "error_model" not in unusable and settings.error_model not in ERROR_MODELS:
        cure = ", ".join(ERROR_MODELS)
        yield Problem(f"unknown error model {settings.error_model!r}", field="error_model", cure=cure)
    for name, (what, low, high) in WHOLE_NUMBERS.items():
        if name not in unusable and not low <= getattr(settings, name) <= high:
            yield Problem(f"{what} of {getattr(settings, name)}", field=name, cure=f"{low} to {high}")
    for name, (what, usable, cure) in NUMBERS.items():
        if name not in unusable and not usable(getattr(settings, name)):
            yield Problem(f"{what} of {getattr(settings, name):g}", field=name, cure=cure)


def _constants(
    network: Network, experiments: Sequence[Experiment], constants: Sequence[Constant]
) -> Iterator[Problem]:
    names = [c.name for c in constants]
    for name in _repeated(names):
        yield Problem(f"constant {name} is given twice", field=name)
    for name in network.constants:
        if name not in names:
            yield Problem(
                f"constant {name} has no start value", field=name, cure="a start value for each constant"
            )
    computed = {c.name for c in network.computed}
    for constant in constants:
        if constant.name in computed:
            yield Problem(
                f"{constant.name} is computed by the mechanism", field=constant.name, cure="leave it out"
            )
        elif constant.name not in network.constants:
            cure = "one of " + ", ".join(network.constants)
            yield Problem(f"the mechanism has no constant {constant.name}", field=constant.name, cure=cure)
        if constant.scope not in ("same in all runs", "in a group", "own per run", "held"):
            yield Problem(f"unknown scope {constant.scope!r} of {constant.name}", field=constant.name)
        if constant.scope == "in a group":
            missing = [e.name for e in experiments if (constant.group_by or "") not in e.groups]
            if missing:
                what = f"{constant.name} is grouped by {constant.group_by!r}, which these experiments lack: "
                yield Problem(what + ", ".join(missing), field=constant.name)
                continue
        yield from _start_names(constant, experiments)
        free = constant.scope != "held"
        values = {constant.start, *constant.starts.values()}
        values |= {start_value(constant, e) for e in experiments}
        for value in sorted(values, key=str):
            yield from _start_in_bounds(
                constant.name, value, constant.lower, constant.upper, constant.positive, free
            )
        yield from _bounds(constant.name, constant.lower, constant.upper, constant.positive)
        yield from _prior(constant.name, constant.prior, constant.positive)


def _starts(network: Network, starts: Sequence[StartConcentration]) -> Iterator[Problem]:
    names = [s.species for s in starts]
    for name in _repeated(names):
        yield Problem(f"the start concentration of {name} is given twice", field=name)
    for start in starts:
        name = f"[{start.species}]0"
        if start.species not in network.species:
            cure = "one of " + ", ".join(network.species)
            yield Problem(f"the mechanism has no species {start.species}", field=name, cure=cure)
        if start.scope not in ("same in all runs", "own per run"):
            yield Problem(
                f"scope {start.scope!r} of {name}", field=name, cure="same in all runs, or own per run"
            )
        yield from _start_in_bounds(name, start.start, start.lower, start.upper, True, True)
        yield from _bounds(name, start.lower, start.upper, True)
        yield from _prior(name, start.prior, True)


def _start_names(constant: Constant, experiments: Sequence[Experiment]) -> Iterator[Problem]:
    """Start values of a constant that nothing in the fit would take."""
    usable = start_keys(constant, experiments)
    unknown = [key for key in constant.starts if key not in usable]
    if unknown:
        named = ", ".join(str(key) for key in unknown[:20])
        what = f"start values of {constant.name} for what it has no value of its own in: {named}"
        if constant.scope == "same in all runs":
            cure = "none, since it is the same in all runs; or the scope in a group, or own per run"
        else:
            cure = "one of " + ", ".join(usable[:20])
        yield Problem(what, field=constant.name, cure=cure)


def _start_in_bounds(
    name: str, value: float, lower: float | None, upper: float | None, positive: bool, free: bool
) -> Iterator[Problem]:
    if not math.isfinite(value):
        yield Problem(f"start {value} of {name} is not finite", field=name, cure="a finite number")
    elif abs(value) > LARGEST_SIZE:
        yield Problem(f"start {value:g} of {name} is too large", field=name, cure=f"up to {LARGEST_SIZE:g}")
    elif positive and (value < 0 or (free and value == 0)):
        yield Problem(f"start {value:g} of {name} is not positive", field=name, cure="above 0")
    elif free and lower is not None and value < lower:
        yield Problem(f"start {value:g} of {name} is below its lower bound {lower:g}", field=name)
    elif free and upper is not None and value > upper:
        yield Problem(f"start {value:g} of {name} is above its upper bound {upper:g}", field=name)


def _bounds(name: str, lower: float | None, upper: float | None, positive: bool) -> Iterator[Problem]:
    for bound in (lower, upper):
        if bound is not None and math.isnan(bound):
            yield Problem(f"a bound of {name} is not a number", field=name, cure="a number, or no bound")
    if lower is not None and upper is not None and not lower < upper:
        yield Problem(f"lower bound {lower:g} of {name} is not below its upper bound {upper:g}", field=name)
    if positive and upper is not None and upper <= 0:
        yield Problem(f"upper bound {upper:g} of {name} is not positive", field=name, cure="above 0")
    if positive and lower is not None and lower < 0:
        yield Problem(
            f"lower bound {lower:g} of {name} is negative", field=name, cure="zero or more, or none"
        )


def _prior(name: str, prior: Prior | None, positive: bool) -> Iterator[Problem]:
    if prior is None:
        return
    if not 1.0 / LARGEST_SIZE <= prior.sd <= LARGEST_SIZE:
        cure = f"above 0, up to {LARGEST_SIZE:g}"
        yield Problem(f"prior sd {prior.sd:g} of {name}", field=name, cure=cure)
    if not abs(prior.mean) <= LARGEST_SIZE or (positive and prior.mean <= 0):
        cure = f"up to {LARGEST_SIZE:g}, above 0 if positive"
        yield Problem(f"prior mean {prior.mean:g} of {name}", field=name, cure=cure)


def _nuisances(nuisances: Sequence[Nuisance]) -> Iterator[Problem]:
    names = [n.name for n in nuisances]
    for name in _repeated(names):
        yield Problem(f"nuisance parameter {name} is given twice", field=name)
    for nuisance in nuisances:
        if not (math.isfinite(nuisance.sd) and nuisance.sd > 0):
            yield Problem(f"sd {nuisance.sd:g} of {nuisance.name}", field=nuisance.name, cure="above 0")
        if nuisance.kind not in ("factor", "time shift"):
            yield Problem(f"unknown kind {nuisance.kind!r} of {nuisance.name}", field=nuisance.name)


def _experiments(
    network: Network, experiments: Sequence[Experiment], nuisances: Sequence[Nuisance], settings: Settings
) -> Iterator[Problem]:
    names = [e.name for e in experiments]
    if not experiments:
        yield Problem("there is no experiment to fit", field="experiments")
    for name in _repeated(names):
        yield Problem(f"two experiments are called {name}", field=name)
    kinds = {n.name: n.kind for n in nuisances}
    for experiment in experiments:
        yield from _one_experiment(network, experiment, kinds, settings)


def _one_experiment(
    network: Network, experiment: Experiment, kinds: Mapping[str, str], settings: Settings
) -> Iterator[Problem]:
    def problem(message: str, cure: str = "") -> Problem:
        return Problem(f"{experiment.name}: {message}", field=experiment.name, cure=cure)

    t = experiment.times
    for name in experiment.observed:
        if name not in network.observable_names:
            yield problem(
                f"the mechanism has no observable {name}", "one of " + ", ".join(network.observable_names)
            )
        if experiment.observed.count(name) > 1:
            yield problem(f"{name} stands twice among the observed")
    if experiment.values.shape != (len(t), len(experiment.observed)):
        yield problem(
            f"values of shape {experiment.values.shape}",
            f"({len(t)}, {len(experiment.observed)}) by the times",
        )
        return
    if t.ndim != 1 or not np.isfinite(t).all() or np.any(np.diff(t) < 0):
        yield problem("times are not finite and increasing")
    if np.isinf(experiment.values).any():
        yield problem("an infinite value", "NaN for 'no value'")
    for charge in experiment.charges:
        if charge.species not in network.species:
            yield problem(
                f"the mechanism has no species {charge.species}", "one of " + ", ".join(network.species)
            )
        if not (math.isfinite(charge.concentration) and charge.concentration >= 0):
            yield problem(f"concentration {charge.concentration:g} of {charge.species}", "zero or more")
    used = [(f, "factor") for c in experiment.charges for f in c.factors]
    used += [(f, "factor") for factors in experiment.signal_factors.values() for f in factors]
    if experiment.time_shift is not None:
        used.append((experiment.time_shift, "time shift"))
    for name, kind in dict.fromkeys(used):
        if name not in kinds:
            yield problem(f"unknown nuisance parameter {name}", "one of " + (", ".join(kinds) or "none"))
        elif kinds[name] != kind:
            yield problem(f"nuisance parameter {name} is a {kinds[name]}", f"one of kind {kind}")
    for name in experiment.signal_factors:
        if name not in experiment.observed:
            yield problem(f"a signal factor for {name}, which is not observed")
    temperature = experiment.temperature
    if temperature is None:
        if equations_of(network).needs_temperature:
            yield problem("the mechanism uses T and the temperature is unknown")
    elif not (math.isfinite(temperature) and temperature > 0):
        yield problem(f"temperature {temperature:g} K", "above 0 K")
    yield from _points(experiment, settings, problem)


def _points(experiment: Experiment, settings: Settings, problem: Callable[..., Problem]) -> Iterator[Problem]:
    if settings.error_model == "as tabulated":
        if experiment.sigma is None:
            yield problem("no standard uncertainties are tabulated", "a sigma per point, or one fitted sigma")
            return
        if experiment.sigma.shape != experiment.values.shape:
            yield problem(
                f"sigma of shape {experiment.sigma.shape}", f"{experiment.values.shape} as the values"
            )
            return
        given = np.isfinite(experiment.values)
        if np.any(experiment.sigma[given] <= 0) or np.isinf(experiment.sigma[given]).any():
            yield problem("a standard uncertainty that is not positive", "above 0")
        if np.isnan(experiment.sigma[given]).any():
            yield problem("a value without its standard uncertainty", "a sigma, or no value")
    if not valid_points(experiment, settings).any():
        yield problem("no point is left to fit", "at least one value, or leave the experiment out")


def _counts(
    network: Network,
    experiments: Sequence[Experiment],
    constants: Sequence[Constant],
    starts: Sequence[StartConcentration],
    nuisances: Sequence[Nuisance],
    settings: Settings,
) -> Iterator[Problem]:
    parameters = ParameterMap(network, experiments, constants, starts, nuisances).parameters
    names = [p.name for p in parameters]
    others = {p.name for p in parameters if p.kind != "nuisance"}
    for name in sorted({n.name for n in nuisances} & others):
        yield Problem(f"nuisance parameter {name} has the name of another parameter", field=name)
    n = sum(int(valid_points(e, settings).sum()) for e in experiments)
    size = sum(e.values.size for e in experiments) * len(parameters)
    if size > LARGEST_JACOBIAN:
        what = f"{len(parameters)} parameters times {size // len(parameters)} values are too many for one fit"
        yield Problem(what, cure=f"at most {LARGEST_JACOBIAN:.0e} together; thin out the tables")
    if len(parameters) > MOST_PARAMETERS:
        what = f"{len(parameters)} parameters are too many for one fit"
        yield Problem(what, cure=f"at most {MOST_PARAMETERS}, those of the causes of error counted")
    without_prior = sum(p.prior_sd is None for p in parameters)
    if without_prior > n:
        what = f"{without_prior} parameters without a prior are to be found from {n} values"
        yield Problem(what, cure="fewer free parameters, more data, or priors: " + ", ".join(names[:20]))


def _repeated(names: Iterable[str]) -> list[str]:
    return sorted(name for name, times in Counter(names).items() if times > 1)
