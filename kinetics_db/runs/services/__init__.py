"""Writing runs."""

from kinetics_db.runs.services.log import log_run, revise_run, seal_run
from kinetics_db.runs.services.preview import Preview, preview_entry

__all__ = ["Preview", "log_run", "preview_entry", "revise_run", "seal_run"]
