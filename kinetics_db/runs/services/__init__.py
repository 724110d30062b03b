"""Writing runs."""

from kinetics_db.runs.services.log import log_run, revise_run, seal_run

__all__ = ["log_run", "revise_run", "seal_run"]
