"""Imports go one way. The contracts stand in pyproject.toml; here it is shown that they can fail."""

from __future__ import annotations

import itertools
import subprocess
import sys
import tomllib
from pathlib import Path

import grimp
import pytest

ROOT = Path(__file__).resolve().parents[2]
CONFIG = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["importlinter"]
LAYERS = next(c["layers"] for c in CONFIG["contracts"] if c.get("containers") == ["kinetics_db"])


def siblings(layer: str) -> list[str]:
    return [name.strip() for name in layer.split("|")]


def as_grimp(layers: list[str]) -> list[object]:
    return [grimp.Layer(*siblings(layer), independent=True) if "|" in layer else layer for layer in layers]


@pytest.fixture(scope="module")
def graph() -> grimp.ImportGraph:
    return grimp.build_graph("kinetics_db", "api", "workers", cache_dir=None)


def test_every_folder_of_the_house_has_its_place_in_the_layers() -> None:
    named = {name for layer in LAYERS for name in siblings(layer)}
    here = {
        path.stem
        for path in (ROOT / "kinetics_db").iterdir()
        if (path.is_dir() and (path / "__init__.py").exists())
        or (path.suffix == ".py" and path.stem != "__init__")
    }
    assert here == named


def test_no_import_goes_up(graph: grimp.ImportGraph) -> None:
    assert not graph.find_illegal_dependencies_for_layers(as_grimp(LAYERS), containers={"kinetics_db"})


@pytest.mark.parametrize(
    ("upper", "lower"), list(itertools.pairwise(LAYERS)), ids=lambda layer: layer.replace(" | ", "+")
)
def test_an_import_from_a_layer_to_the_one_above_it_is_found(
    graph: grimp.ImportGraph, upper: str, lower: str
) -> None:
    importer, imported = f"kinetics_db.{siblings(lower)[0]}", f"kinetics_db.{siblings(upper)[0]}"
    assert not graph.direct_import_exists(importer=importer, imported=imported)
    graph.add_import(importer=importer, imported=imported)
    try:
        assert graph.find_illegal_dependencies_for_layers(as_grimp(LAYERS), containers={"kinetics_db"})
    finally:
        graph.remove_import(importer=importer, imported=imported)


@pytest.mark.parametrize("domain", ["runs", "fits", "jobs", "provenance", "evidence"])
def test_models_that_import_services_are_found(graph: grimp.ImportGraph, domain: str) -> None:
    importer, imported = f"kinetics_db.{domain}.models", f"kinetics_db.{domain}.services"
    graph.add_import(importer=importer, imported=imported)
    try:
        assert graph.find_illegal_dependencies_for_layers(
            ["services", "selectors", "models"], containers={f"kinetics_db.{domain}"}
        )
    finally:
        graph.remove_import(importer=importer, imported=imported)


def test_the_contracts_are_kept() -> None:
    done = subprocess.run(
        [str(Path(sys.executable).parent / "lint-imports"), "--no-cache"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout


def test_the_engine_imports_without_any_framework() -> None:
    program = (
        "import sys\n"
        "class Refuse:\n"
        "    def find_spec(self, name, path=None, target=None):\n"
        "        if name.split('.')[0] in {'django', 'rest_framework', 'celery', 'psycopg'}:\n"
        "            raise ImportError(name)\n"
        "sys.meta_path.insert(0, Refuse())\n"
        "import kinetics_db.engine, kinetics_db.engine.comparison, kinetics_db.engine.calibration\n"
        "from kinetics_db.engine import parse_mechanism, simulate\n"
        "curves = simulate(parse_mechanism('A --k--> B'), constants={'k': 1.0}, start={'A': 1.0}, times=[0.0, 1.0])\n"
        "print(round(float(curves.of('B')[-1]), 6))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.stdout.strip() == "0.632121", done.stderr
