"""Another invented system, with other substances, constants, temperatures and number of runs."""

from __future__ import annotations

from kinetics_db.demo.invented.plan import (
    Addition,
    Bottle,
    Plan,
    PlannedRun,
    Rival,
    Solution,
    Substance,
    Truth,
)
from kinetics_db.runs.entry import Amount

CONSTANTS = {40.0: {"k1": 8.0e-4, "k2": 2.5e-3}, 60.0: {"k1": 4.1e-3, "k2": 1.15e-2}}

TRUTH = Truth(
    mechanism="pinol --k1--> quinal\nquinal + thiol --k2--> sulfol\n",
    constants=CONSTANTS,
)
STARTS = {"k1": 5e-3, "k2": 2e-3}
RIVALS = (
    Rival("by way of quinal", TRUTH.mechanism, "", STARTS),
    Rival(
        "both at once",
        "pinol --k1--> quinal\npinol + thiol --k2--> sulfol\n",
        "",
        STARTS,
    ),
)


def _run(code: str, celsius: float, millilitres: float, layout: str, gain: float) -> PlannedRun:
    end = 3000.0 if celsius < 50.0 else 600.0
    return PlannedRun(
        code=code,
        celsius=celsius,
        additions=(
            Addition("P7", Amount(60.0, "mg", 0.2)),
            Addition("ether 1", Amount(500.0, "uL")),
            Addition("thiol 1", Amount(millilitres, "mL", 0.008)),
        ),
        volume=Amount(5.0, "mL"),
        times=tuple(end / 20 * i for i in range(1, 21)),
        layout=layout,
        gain=gain,
        missing=((3, "quinal"),) if code == "c" else (),
    )


PLAN = Plan(
    slug="another",
    name="another invented system",
    description="",
    substances=(Substance("pinol", 120.0), Substance("thiol", 90.0), Substance("ether", 118.0)),
    bottles=(
        Bottle("P7", "pinol", 0.97, 0.004),
        Bottle("T1", "thiol", 0.99, 0.003),
        Bottle("E1", "ether", 0.995, 0.003),
    ),
    solutions=(
        Solution("thiol 1", "T1", Amount(4.55, "g", 0.005), Amount(25.0, "mL", 0.04)),
        Solution("ether 1", "E1", Amount(1.19, "g", 0.002), Amount(10.0, "mL", 0.02)),
    ),
    runs=(
        _run("a", 40.0, 0.25, "aligned", 10.0),
        _run("b", 40.0, 1.0, "semicolons", 3.0),
        _run("c", 40.0, 2.0, "units row", 400.0),
        _run("d", 60.0, 0.25, "stop watch", 1.7),
        _run("e", 60.0, 1.0, "spreadsheet", 25.0),
    ),
    nuclei={"ether": 6, "quinal": 1, "pinol": 2, "sulfol": 3},
    standard="ether",
    noise=0.002,
)
