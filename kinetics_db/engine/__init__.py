"""The pure engine: values in, values out. Knows no framework, database or settings."""

from __future__ import annotations

from kinetics_db.engine.conditions import Conditions as Conditions
from kinetics_db.engine.fitting.global_fit import fit_globally as fit_globally
from kinetics_db.engine.network.notation import parse_mechanism as parse_mechanism
from kinetics_db.engine.simulation.reference import simulate as simulate
