"""An invented project through the services, and the same flow with a system that is not the demonstration's."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

from kinetics_db.demo.invented.exports import export_file
from kinetics_db.demo.invented.in_memory import Problem, problem_of
from kinetics_db.demo.invented.loading import Loaded, ask_for_fits, load
from kinetics_db.demo.invented.reality import what_happened
from kinetics_db.demo.report import report_of
from kinetics_db.demo.tern import SEED, load_tern, tern_problem, write_files
from kinetics_db.demo.tern.mechanisms import MECHANISM, RIVALS
from kinetics_db.demo.tern.plan import PLAN
from kinetics_db.engine.network import parse_mechanism
from kinetics_db.evidence.selectors import grid_of
from kinetics_db.fits.casting import Casting, complete_casting
from kinetics_db.fits.experiments import data_of, experiments_of
from kinetics_db.fits.models import Fit
from kinetics_db.measurements.models import ConcentrationTable, InstrumentFile, SignalTable
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.provenance.models import AuditEntry
from kinetics_db.runs.models import Run, RunRevision
from tests.demo import another
from tests.factories.flow import compute_now
from tests.factories.people import make_user

ROOT = Path(__file__).resolve().parents[2]


def load_another(seed: int = 7) -> Loaded:
    exports = what_happened(another.PLAN, another.TRUTH, seed)
    return load(another.PLAN, exports, another.RIVALS, user=make_user())


def problem_in_database(loaded: Loaded, standard: str, mechanism: str) -> Problem:
    data = data_of(loaded.dataset)
    network = parse_mechanism(mechanism)
    casting = complete_casting(
        network, Casting({standard: None}, {}), compounds=data.compounds, columns=data.columns
    )
    return Problem(network, *experiments_of(data, casting))


def assert_same_problem(one: Problem, other: Problem) -> None:
    assert one.nuisances == other.nuisances
    assert len(one.experiments) == len(other.experiments)
    for a, b in zip(one.experiments, other.experiments, strict=True):
        assert (a.name, a.charges, a.observed, a.temperature, a.groups) == (
            b.name, b.charges, b.observed, b.temperature, b.groups,
        )  # fmt: skip
        assert (a.signal_factors, a.start_time, a.time_shift) == (
            b.signal_factors,
            b.start_time,
            b.time_shift,
        )
        np.testing.assert_array_equal(a.times, b.times)
        np.testing.assert_array_equal(a.values, b.values)
        np.testing.assert_array_equal(a.sigma, b.sigma)


@pytest.mark.django_db
def test_a_second_load_uses_what_is_there() -> None:
    user = make_user()
    models = (Run, RunRevision, InstrumentFile, SignalTable, ConcentrationTable, MechanismVersion, AuditEntry)
    exports = what_happened(another.PLAN, another.TRUTH, 7)
    first = load(another.PLAN, exports, another.RIVALS, user=user)
    counts = [model.objects.count() for model in models]
    said: list[str] = []
    second = load(another.PLAN, exports, another.RIVALS, user=user, say=said.append)
    assert first.is_new and not second.is_new
    assert said == []  # nothing was done
    assert [model.objects.count() for model in models] == counts
    assert second.dataset == first.dataset
    assert [version for _, version in second.versions] == [version for _, version in first.versions]


@pytest.mark.django_db
def test_a_second_request_gives_the_fits_that_are_there() -> None:
    loaded = load_another()
    user = loaded.project.created_by
    first = ask_for_fits(another.PLAN, loaded, user=user)
    assert ask_for_fits(another.PLAN, loaded, user=user) == first
    assert Fit.objects.count() == len(another.RIVALS)


@pytest.mark.django_db
def test_a_load_that_was_broken_off_is_completed_by_the_next() -> None:
    user = make_user()
    exports = what_happened(another.PLAN, another.TRUTH, 7)
    begun = replace(another.PLAN, runs=another.PLAN.runs[:2])
    load(begun, exports[:2], another.RIVALS[:1], user=user)
    said: list[str] = []
    loaded = load(another.PLAN, exports, another.RIVALS, user=user, say=said.append)
    assert loaded.is_new
    assert said == [
        "3 runs logged",
        "3 files read and reduced, 180 concentrations",
        "1 mechanism version written",
        "the dataset of 5 runs frozen",
    ]
    assert Run.objects.count() == len(another.PLAN.runs)
    assert len(data_of(loaded.dataset).items) == len(another.PLAN.runs)


@pytest.mark.django_db
def test_the_services_pose_the_same_fit_as_the_way_without_a_database() -> None:
    loaded = load_another(seed=8)
    for rival in another.RIVALS:
        in_memory = problem_of(another.PLAN, another.TRUTH, seed=8, mechanism=rival.text)
        assert_same_problem(problem_in_database(loaded, "ether", rival.text), in_memory)


@pytest.mark.django_db
def test_tern_in_the_database_is_the_tern_whose_recovery_is_tested() -> None:
    stages: list[str] = []
    loaded = load_tern(user=make_user(), say=stages.append)
    assert "24 files read and reduced, 1728 concentrations" in stages
    assert loaded.is_new and loaded.runs == 24
    assert loaded.project.invented
    assert_same_problem(problem_in_database(loaded, "standard", MECHANISM), tern_problem(SEED))


@pytest.mark.django_db
def test_another_system_passes_through_the_same_flow() -> None:
    loaded = load_another()
    user = loaded.project.created_by
    right, wrong = ask_for_fits(another.PLAN, loaded, user=user)
    result = compute_now(right)
    assert compute_now(wrong).status == "converged"
    assert result.status == "converged"

    rows = [p for p in result.content["parameters"] if p["kind"] == "constant"]
    at = [i for i, p in enumerate(result.content["parameters"]) if p["kind"] == "constant"]
    truth = [another.CONSTANTS[round(float(p["place"].split()[0]) - 273.15, 6)][p["base"]] for p in rows]
    away = np.log([p["value"] for p in rows]) - np.log(truth)
    covariance = np.array(result.content["covariance"], dtype=float)[np.ix_(at, at)]
    assert len(rows) == 4
    assert away @ np.linalg.solve(covariance, away) <= chi2.ppf(0.999, len(rows))

    grid = grid_of(user=user, project_id=loaded.project.pk)
    verdicts = {
        name: [grid.cells[run, fit.pk].verdict for run in grid.runs]
        for name, fit in (("right", right), ("wrong", wrong))
    }
    assert verdicts["right"] == ["agrees"] * 5
    assert "disagrees" in verdicts["wrong"]
    by_fit = {column.fit_id: column.delta_aicc for column in grid.columns}
    assert by_fit[right.pk] == 0.0
    assert (by_fit[wrong.pk] or 0.0) > 10

    report = report_of(user=user, project=loaded.project)
    assert "INVENTED" in report
    assert max(map(len, report.splitlines())) <= 100
    for word in ("k1", "313.15 K", "333.15 K", "by way of quinal v1", "95 % interval", "L/mol/s"):
        assert word in report
    assert not re.search(r"\btern\b|lactone|k_add", report)


@pytest.mark.django_db
def test_a_project_whose_fits_have_not_run_reports_what_they_wait_for() -> None:
    loaded = load_another()
    user = loaded.project.created_by
    ask_for_fits(another.PLAN, loaded, user=user)
    report = report_of(user=user, project=loaded.project)
    assert "by way of quinal v1 on the dataset 'all runs', version 1: waiting" in report
    assert "No fit has a result yet." in report


def test_the_files_written_to_a_folder_are_those_that_are_uploaded(tmp_path: Path) -> None:
    exports = write_files(tmp_path / "exports")
    assert len(list((tmp_path / "exports").iterdir())) == len(PLAN.runs)
    for export in exports:
        name, data = export_file(export)
        assert (tmp_path / "exports" / name).read_bytes() == data


def test_nothing_of_the_demonstration_stands_outside_its_folder() -> None:
    names = {rival.name for rival in RIVALS} | {PLAN.slug, "adduct", "k_add", "k_open"}
    words = re.compile("|".join(rf"\b{re.escape(name)}\b" for name in names))
    found = [
        str(path.relative_to(ROOT))
        for folder in ("kinetics_db", "api", "workers")
        for path in (ROOT / folder).rglob("*")
        if path.suffix in {".py", ".html", ".css", ".js", ".txt"}
        and ROOT / "kinetics_db" / "demo" not in path.parents
        and words.search(path.read_text(errors="replace"))
    ]
    assert not found
