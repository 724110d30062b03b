"""What the import linter cannot see."""

from __future__ import annotations

import re
import subprocess
from pathlib import Path

import pytest
from django.apps import apps
from django.db import models
from django.urls import URLPattern, URLResolver, get_resolver

from kinetics_db import task_queue
from tests.architecture.test_layers import LAYERS, ROOT, siblings

ORDER = {name: i for i, layer in enumerate(LAYERS) for name in siblings(layer)}
OURS = [m for m in apps.get_models(include_auto_created=True) if m.__module__.startswith("kinetics_db.")]
KEYS = [
    (model, field)
    for model in OURS
    for field in model._meta.get_fields()
    if isinstance(field, models.ForeignKey) and not model._meta.auto_created
]


def domain_of(model: type[models.Model]) -> str:
    return model.__module__.split(".")[1]


@pytest.mark.parametrize(("model", "field"), KEYS, ids=lambda x: getattr(x, "name", None) or x.__name__)
def test_a_foreign_key_protects_what_it_points_to(
    model: type[models.Model], field: models.ForeignKey
) -> None:
    assert field.remote_field.on_delete is models.PROTECT


@pytest.mark.parametrize(("model", "field"), KEYS, ids=lambda x: getattr(x, "name", None) or x.__name__)
def test_a_foreign_key_points_down_the_layers(model: type[models.Model], field: models.ForeignKey) -> None:
    target = field.related_model
    if not target.__module__.startswith("kinetics_db."):
        return
    assert ORDER[domain_of(target)] >= ORDER[domain_of(model)], (
        f"{model.__name__}.{field.name} points upwards"
    )


def test_declared_task_names_are_the_registered_ones() -> None:
    from workers import tasks  # noqa: F401
    from workers.celery_app import app

    registered = {name for name in app.tasks if not name.startswith("celery.")}
    assert registered == task_queue.TASK_NAMES


def test_every_address_leads_to_a_view() -> None:
    def walk(patterns: list[URLPattern | URLResolver]) -> int:
        count = 0
        for pattern in patterns:
            if isinstance(pattern, URLResolver):
                count += walk(pattern.url_patterns)
            else:
                assert callable(pattern.callback)
                count += 1
        return count

    assert walk(get_resolver().url_patterns) >= 4


def tracked(suffix: str) -> list[Path]:
    listed = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard", f"*{suffix}"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    )
    return [ROOT / line for line in listed.stdout.split("\n") if line and (ROOT / line).exists()]


def test_no_source_file_is_longer_than_about_400_lines() -> None:
    long = {
        str(path.relative_to(ROOT)): lines
        for path in tracked(".py")
        if "migrations" not in path.parts and (lines := len(path.read_text().splitlines())) > 420
    }
    assert not long


def test_no_file_names_a_package_registry() -> None:
    hosts = re.compile(r"(?:pypi|pythonhosted|npmjs|debian)\.org", re.IGNORECASE)
    naming = [
        str(path.relative_to(ROOT))
        for suffix in (".py", ".toml", ".lock", ".md", ".yml", "Makefile", "Dockerfile", ".json", ".ci/run")
        for path in tracked(suffix)
        if path.name != Path(__file__).name and hosts.search(path.read_text(errors="replace"))
    ]
    assert not naming


def test_the_suite_reads_nothing_outside_the_project() -> None:
    outside = "/".join(["..", "shared"])
    reading = [
        str(path.relative_to(ROOT))
        for path in tracked(".py")
        if outside in path.read_text() or "/work" + "/shared" in path.read_text()
    ]
    assert not reading
