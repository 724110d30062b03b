"""Asking for fits, computing them, keeping their results."""

from kinetics_db.fits.services.compute import Computed, Pulse, compute_fit, store_result
from kinetics_db.fits.services.request import JOB_KIND, request_fit, retry_fit, stop_fit

__all__ = [
    "JOB_KIND",
    "Computed",
    "Pulse",
    "compute_fit",
    "request_fit",
    "retry_fit",
    "stop_fit",
    "store_result",
]
