"""What was set out to do in *tern*: 24 runs of 10 mL, one component varied at a time."""

from __future__ import annotations

from collections.abc import Mapping

from kinetics_db.demo.invented.plan import Addition, Bottle, Plan, PlannedRun, Solution, Substance
from kinetics_db.runs.entry import Amount

SUBSTANCES = (
    Substance("lactone", 156.18),
    Substance("alcohol", 74.12),
    Substance("base", 152.24),
    Substance("water", 18.015),
    Substance("standard", 246.43),
)

BOTTLES = (
    Bottle("L-1", "lactone", purity=0.982, purity_u=0.004),
    Bottle("N-1", "alcohol", purity=0.995, purity_u=0.002),
    Bottle("B-1", "base", purity=0.978, purity_u=0.004),
    Bottle("W-1", "water", purity=1.0, purity_u=0.0),
    Bottle("S-1", "standard", purity=0.994, purity_u=0.002),
    Bottle("S-2", "standard", purity=0.991, purity_u=0.003),
)


def _flask(millilitres: float) -> Amount:
    return Amount(millilitres, "mL", {25.0: 0.04, 50.0: 0.06, 100.0: 0.1}[millilitres])


SOLUTIONS = (
    Solution("alcohol A", "N-1", Amount(14.90, "g", 0.01), _flask(50.0), "2026-03-02"),
    Solution("base A", "B-1", Amount(7.780, "g", 0.005), _flask(50.0), "2026-03-02"),
    Solution("base B", "B-1", Amount(7.815, "g", 0.005), _flask(50.0), "2026-03-05"),
    Solution("water A", "W-1", Amount(1.802, "g", 0.003), _flask(50.0), "2026-03-02"),
    Solution("standard A", "S-1", Amount(6.190, "g", 0.02), _flask(50.0), "2026-03-02"),
    Solution("standard B", "S-2", Amount(6.155, "g", 0.02), _flask(50.0), "2026-03-05"),
)

USUAL = {"lactone": 0.10, "alcohol": 0.50, "base": 0.10, "water": 0.20}  # mol/L
NOMINAL = {"alcohol": 4.0, "base": 1.0, "water": 2.0}  # mol/L in the solutions
HOURS = {15.0: 5.0, 25.0: 2.5, 35.0: 1.2}
LAYOUT_OF_DAY = ("commented commas", "semicolons", "units row", "stop watch", "spreadsheet", "aligned")
GAINS = (5.555, 111.1, 1000.0, 0.8, 55.55)  # a.u. per mol/L of nuclei: how the instrument scaled that day

# (code, degC, what differs from the usual concentrations, replicate of, control)
SERIES: tuple[tuple[str, float, Mapping[str, float], str, str], ...] = (
    ("T-01", 25.0, {}, "", ""),
    ("T-02", 25.0, {}, "T-01", ""),
    ("T-03", 25.0, {"alcohol": 0.25}, "", ""),
    ("T-04", 25.0, {"alcohol": 1.0}, "", ""),
    ("T-05", 25.0, {"base": 0.05}, "", ""),
    ("T-06", 25.0, {"base": 0.2}, "", ""),
    ("T-07", 25.0, {"water": 0.05}, "", ""),
    ("T-08", 25.0, {"water": 0.6}, "", ""),
    ("T-09", 25.0, {"lactone": 0.05}, "", ""),
    ("T-10", 25.0, {"base": 0.0}, "", "without reagent"),
    ("T-11", 15.0, {}, "", ""),
    ("T-12", 15.0, {}, "T-11", ""),
    ("T-13", 15.0, {"alcohol": 1.0}, "", ""),
    ("T-14", 15.0, {"base": 0.05}, "", ""),
    ("T-15", 15.0, {"base": 0.2}, "", ""),
    ("T-16", 15.0, {"water": 0.6}, "", ""),
    ("T-17", 15.0, {"lactone": 0.2}, "", ""),
    ("T-18", 35.0, {}, "", ""),
    ("T-19", 35.0, {}, "T-18", ""),
    ("T-20", 35.0, {"alcohol": 0.25}, "", ""),
    ("T-21", 35.0, {"alcohol": 1.0}, "", ""),
    ("T-22", 35.0, {"base": 0.05}, "", ""),
    ("T-23", 35.0, {"base": 0.2}, "", ""),
    ("T-24", 35.0, {"water": 0.6}, "", ""),
)

MISSING = {"T-03": ((7, "adduct"),), "T-08": ((11, "acid"),), "T-17": ((4, "ester"),)}


def _additions(number: int, differs: Mapping[str, float]) -> tuple[Addition, ...]:
    """Weighed lactone and pipetted solutions for 10 mL; the base, which starts the reaction, comes last."""
    late = number > 12
    wanted = {**USUAL, **differs}
    grams = wanted["lactone"] * 0.010 * 156.18 / 0.982
    added = [Addition("L-1", Amount(round(grams * 1000.0, 1), "mg", 0.3))]
    pipetted = {
        "alcohol A": wanted["alcohol"] / NOMINAL["alcohol"],
        "standard B" if late else "standard A": 0.1,
        "water A": wanted["water"] / NOMINAL["water"],
        "base B" if late else "base A": wanted["base"] / NOMINAL["base"],
    }
    for solution, share in pipetted.items():
        millilitres = round(10.0 * share, 3)
        error = 0.0 if solution.startswith("standard") else round(0.002 + 0.004 * millilitres, 4)
        if millilitres > 0:
            added.append(Addition(solution, Amount(millilitres, "mL", error)))
    return tuple(added)


def _times(celsius: float) -> tuple[float, ...]:
    """18 spectra: every half minute of the clock could be one; they thin out as the reaction slows down."""
    end = HOURS[celsius] * 3600.0
    return tuple(18.0 * round(end * (i / 18) ** 1.6 / 18.0) for i in range(1, 19))


def _run(number: int, entry: tuple[str, float, Mapping[str, float], str, str]) -> PlannedRun:
    code, celsius, differs, replicate_of, control = entry
    day = number // 3
    return PlannedRun(
        code=code,
        celsius=celsius,
        additions=_additions(number, differs),
        volume=Amount(10.0, "mL"),
        times=_times(celsius),
        layout=LAYOUT_OF_DAY[number % len(LAYOUT_OF_DAY)],
        gain=GAINS[number % len(GAINS)],
        missing=MISSING.get(code, ()),
        replicate_of=replicate_of,
        control_kind=control,
        started=f"2026-03-{2 + day:02d}T{9 + 2 * (number % 3):02d}:00:00+01:00",
    )


PLAN = Plan(
    slug="tern",
    name="tern (invented)",
    description="Opening of an activated lactone by an alcohol and a base, with water competing. Invented data.",
    substances=SUBSTANCES,
    bottles=BOTTLES,
    solutions=SOLUTIONS,
    runs=tuple(_run(number, entry) for number, entry in enumerate(SERIES)),
    nuclei={"lactone": 2, "adduct": 2, "ester": 3, "acid": 2, "standard": 18},
    standard="standard",
    noise=0.0014,
)
