"""Addresses of REST under /api/v1/."""

from __future__ import annotations

from importlib import import_module

from django.urls import URLPattern, path, re_path

from api.elsewhere import Elsewhere
from api.health import Health

PARTS = (
    "projects",
    "materials",
    "runs",
    "measurements",
    "tables",
    "mechanisms",
    "simulate",
    "datasets",
    "fits",
    "evidence",
    "tokens",
    "schema",
)
"""Modules of this package whose ``urlpatterns`` are collected here."""


def _collected() -> list[URLPattern]:
    return [pattern for part in PARTS for pattern in import_module(f"api.{part}").urlpatterns]


app_name = "api"
urlpatterns = [
    path("health/", Health.as_view(), name="health"),
    *_collected(),
    re_path(r"", Elsewhere.as_view(), name="elsewhere"),  # last: it takes what no other did
]
