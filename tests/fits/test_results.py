"""What comes out of a fit and how it is kept."""

from __future__ import annotations

import csv
import io
from typing import Any

import numpy as np
import pytest

from kinetics_db.datasets.services import Window, freeze_dataset
from kinetics_db.engine.canonical import sha256_hex
from kinetics_db.engine.fitting.problem import Constant, Settings, StartConcentration
from kinetics_db.evidence.models import ModelEvidence
from kinetics_db.evidence.selectors import evidence_of, grid_of
from kinetics_db.exchange.tidy import tidy_csv
from kinetics_db.fits.models import Fit, FitResult
from kinetics_db.fits.selectors import fits_in, result_of
from kinetics_db.fits.services import request_fit, retry_fit
from kinetics_db.jobs import services as jobs
from kinetics_db.jobs.models import Job
from kinetics_db.jobs.selectors import job_for
from kinetics_db.jobs.services import request_stop
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.services import set_verdict_thresholds
from kinetics_db.provenance.selectors import chain_breaks
from tests.factories.flow import compute_now
from tests.factories.small import SmallStudy, make_study

pytestmark = pytest.mark.django_db


def fitted(study: SmallStudy, **changes: Any) -> FitResult:
    values: dict[str, Any] = {
        "user": study.user,
        "dataset": study.dataset,
        "mechanism_version": study.version,
        "constants": [Constant("k", start=0.002)],
        **changes,
    }
    return compute_now(request_fit(**values))


def by_name(result: FitResult) -> dict[str, Any]:
    return {c.name: c for c in result.constants.all()}


def test_a_constant_is_found_with_its_unit_and_an_interval_that_holds_it() -> None:
    result = fitted(make_study())
    k = by_name(result)["k"]
    assert result.status == "converged"
    assert k.low < 0.01 < k.high
    assert k.value == pytest.approx(0.01, rel=0.02)
    assert k.unit == "1/s"


def test_own_constants_differ_from_run_to_run() -> None:
    result = fitted(make_study(k=(0.01, 0.03)), constants=[Constant("k", start=0.01, scope="own per run")])
    found = by_name(result)
    assert found["k @ R-1"].value == pytest.approx(0.01, rel=0.03)
    assert found["k @ R-2"].value == pytest.approx(0.03, rel=0.03)


def test_constants_in_a_group_are_shared_by_the_runs_at_one_temperature() -> None:
    result = fitted(
        make_study(k=(0.01, 0.03)),
        constants=[Constant("k", start=0.01, scope="in a group", group_by="temperature")],
    )
    assert sorted(by_name(result)) == ["k @ 303.15 K", "k @ 313.15 K"]
    assert by_name(result)["k @ 313.15 K"].value == pytest.approx(0.03, rel=0.03)


def test_a_held_constant_is_not_fitted() -> None:
    study = make_study()
    version = write_version(
        user=study.user, project_id=study.project.pk, name="back", text="A <--k / k_b--> B"
    )
    constants = [Constant("k", start=0.005), Constant("k_b", start=1e-9, scope="held")]
    assert list(by_name(fitted(study, mechanism_version=version, constants=constants))) == ["k"]


def test_the_weighing_of_a_run_is_an_unknown_owned_by_that_run() -> None:
    content = fitted(make_study()).content
    pulls = {p["name"]: p for p in content["pulls"]}
    assert {p["owner"] for p in pulls.values()} == {"run R-1", "run R-2"}
    assert all(abs(p["pull"]) < 3.5 for p in pulls.values())


def test_a_start_concentration_can_be_fitted() -> None:
    result = fitted(
        make_study(), start_concentrations=[StartConcentration("A", start=0.02, scope="own per run")]
    )
    found = by_name(result)
    assert found["[A]0 @ R-1"].value == pytest.approx(0.010, rel=0.02)
    assert found["[A]0 @ R-2"].unit == "mol/L"


def test_a_result_keeps_curves_residuals_and_library_versions() -> None:
    result = fitted(make_study())
    stored = FitResult.objects.get(pk=result.pk)
    assert sha256_hex(bytes(stored.canonical)) == stored.digest
    content = stored.content
    assert content["libraries"]["numpy"] == np.__version__
    first = content["experiments"][0]
    assert first["name"] == "R-1" and first["observed_names"] == ["A", "B"]
    residual = np.array(first["observed"]) - np.array(first["model"])
    np.testing.assert_allclose(
        residual / np.array(first["sigma"]), np.array(first["standardised"]), rtol=1e-9
    )


def test_two_computations_of_one_request_give_equal_bytes() -> None:
    study = make_study()
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=study.version,
        constants=[Constant("k", start=0.002)],
    )
    first = compute_now(fit)
    from kinetics_db.fits.services.compute import Pulse, compute_fit, result_content

    claim = jobs.Claim(
        job_id=job_for(kind="fit", subject_id=fit.pk).pk, kind="fit", subject_id=fit.pk, token=1
    )
    Job.objects.filter(pk=claim.job_id).update(
        state="running", lease_until="2100-01-01T00:00:00Z", finished=None
    )
    again = result_content(compute_fit(Fit.objects.get(pk=fit.pk), Pulse(claim)))
    assert again == first.content


def test_a_right_model_agrees_and_a_wrong_one_disagrees() -> None:
    study = make_study(starts=(10.0, 20.0, 40.0))
    wrong = write_version(
        user=study.user, project_id=study.project.pk, name="second order", text="2 A --k--> 2 B"
    )
    good = fitted(study)
    bad = fitted(study, mechanism_version=wrong, constants=[Constant("k", start=1.0)])
    grid = grid_of(user=study.user, project_id=study.project.pk)
    assert [grid.cells[code, good.fit_id].verdict for code in grid.runs] == ["agrees"] * 3
    assert "disagrees" in [grid.cells[code, bad.fit_id].verdict for code in grid.runs]
    difference = {column.fit_id: column.delta_aicc for column in grid.columns}
    assert difference[good.fit_id] == 0.0
    assert difference[bad.fit_id] is not None and difference[bad.fit_id] > 10.0


def test_aicc_is_not_compared_between_fits_that_weigh_points_differently() -> None:
    study = make_study()
    fitted(study)
    fitted(study, settings=Settings(error_model="one sigma"))
    keys = set(ModelEvidence.objects.values_list("data_key", flat=True))
    assert len(keys) == 2


def test_with_an_estimated_sigma_the_strongest_word_is_consistent() -> None:
    study = make_study()
    result = fitted(study, settings=Settings(error_model="one sigma"))
    runs = evidence_of(user=study.user, fit_id=result.fit_id).content["runs"]
    assert {run["verdict"] for run in runs} == {"consistent"}


def test_the_project_can_set_its_own_thresholds_and_they_are_kept_with_the_verdict() -> None:
    study = make_study()
    set_verdict_thresholds(user=study.user, project=study.project, thresholds={"chi_square_p": 0.999999})
    result = fitted(study)
    content = evidence_of(user=study.user, fit_id=result.fit_id).content
    assert content["thresholds"]["chi_square_p"] == 0.999999
    assert "agrees" not in {run["verdict"] for run in content["runs"]}


def test_the_grid_takes_the_same_number_of_queries_for_more_runs(django_assert_max_num_queries: Any) -> None:
    study = make_study(starts=(5.0, 10.0, 15.0, 20.0, 25.0, 30.0))
    fitted(study)
    with django_assert_max_num_queries(5):
        grid_of(user=study.user, project_id=study.project.pk)


def test_a_fit_that_is_done_cannot_be_tried_again() -> None:
    study = make_study()
    result = fitted(study)
    from kinetics_db.errors import Conflict

    with pytest.raises(Conflict):
        retry_fit(user=study.user, fit=result.fit)


def test_a_model_that_blows_up_ends_with_a_reason_and_other_fits_go_on() -> None:
    study = make_study()
    version = write_version(
        user=study.user, project_id=study.project.pk, name="explosion", text="2 A --k--> 3 A + B"
    )
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=version,
        constants=[Constant("k", start=1e6)],
    )
    result = compute_now(fit)
    assert result.status in ("cannot start", "not converged")
    job = job_for(kind="fit", subject_id=fit.pk)
    assert job.state in (Job.State.FAILED, Job.State.DONE) and result.content["message"] in job.message
    assert fitted(study).status == "converged"


def test_fits_of_a_project_come_newest_first_with_their_results() -> None:
    study = make_study()
    first = fitted(study)
    second = fitted(study, constants=[Constant("k", start=0.05)])
    listed = list(fits_in(user=study.user, project_id=study.project.pk))
    assert [fit.pk for fit in listed] == [second.fit_id, first.fit_id]
    assert result_of(listed[0]) == second
    assert chain_breaks() == []


def test_a_dataset_leaves_as_one_tidy_table() -> None:
    study = make_study()
    rows = list(csv.DictReader(io.StringIO(tidy_csv(user=study.user, dataset_id=study.dataset.pk))))
    assert len(rows) == 2 * 2 * 12
    first, stored = rows[0], study.tables[0].table
    assert (first["run"], first["run_revision"], first["table"], first["column"]) == ("R-1", "1", "1", "A")
    assert (first["unit"], first["left_out"]) == ("mol/L", "")
    assert float(first["time_s"]) == stored.times[0]
    assert float(first["value"]) == stored.column("A", "concentration")[0]
    assert float(first["standard_uncertainty"]) == pytest.approx(5e-5)


def test_the_tidy_table_holds_what_the_dataset_chooses() -> None:
    study = make_study()
    table = study.tables[0]
    window = Window(end=150.0, columns=("A",), left_out={"A@0": "shaken late"})
    dataset = freeze_dataset(
        user=study.user,
        project_id=study.project.pk,
        name="part",
        table_ids=[table.pk],
        windows={table.pk: window},
    )
    rows = list(csv.DictReader(io.StringIO(tidy_csv(user=study.user, dataset_id=dataset.pk))))
    assert {row["column"] for row in rows} == {"A"}
    assert [float(row["time_s"]) for row in rows] == [t for t in table.table.times if t <= 150.0]
    assert [row["left_out"] for row in rows] == ["shaken late"] + [""] * (len(rows) - 1)


def test_points_outside_the_window_or_left_out_do_not_count_in_a_fit() -> None:
    study = make_study()
    ids = [table.pk for table in study.tables]
    window = Window(end=150.0, columns=("A",), left_out={"A@0": "shaken late", "*@1": "bubble"})
    dataset = freeze_dataset(
        user=study.user, project_id=study.project.pk, name="part", table_ids=ids, windows={ids[0]: window}
    )
    content = fitted(study, dataset=dataset).content
    inside = sum(1 for t in study.tables[0].table.times if t <= 150.0)
    assert content["points"] == (inside - 2) + 24


def test_a_stopped_fit_does_not_take_the_place_of_a_finished_one_in_the_grid() -> None:
    study = make_study()
    good = fitted(study)
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=study.version,
        constants=[Constant("k", start=0.003)],
    )
    request_stop(job=job_for(kind="fit", subject_id=fit.pk))
    retry_fit(user=study.user, fit=fit)
    job = job_for(kind="fit", subject_id=fit.pk)
    Job.objects.filter(pk=job.pk).update(stop_requested=True)
    assert compute_now(fit).status == "stopped"
    columns = grid_of(user=study.user, project_id=study.project.pk).columns
    assert [column.fit_id for column in columns] == [good.fit_id]


def test_one_text_under_two_names_is_fitted_and_shown_as_two_versions() -> None:
    study = make_study()
    twin = write_version(user=study.user, project_id=study.project.pk, name="twin", text="A --k--> B")
    assert twin.digest == study.version.digest
    first, second = fitted(study), fitted(study, mechanism_version=twin)
    assert first.fit_id != second.fit_id
    assert len(grid_of(user=study.user, project_id=study.project.pk).columns) == 2


def test_between_equal_verdicts_the_observable_with_the_smallest_p_is_named() -> None:
    study = make_study(starts=(5.0, 10.0, 15.0, 20.0))
    result = fitted(study)
    evidence = evidence_of(user=study.user, fit_id=result.fit_id)
    named = {row.run_revision.run.code: row for row in evidence.runs.select_related("run_revision__run")}
    chosen = set()
    for run in evidence.content["runs"]:
        tests = {
            o["observable"]: min(
                p for p in (o["chi_square_p_adjusted"], o["runs_p_adjusted"]) if p is not None
            )
            for o in run["observables"]
            if o["verdict"] == run["verdict"]
        }
        row = named[run["experiment"]]
        assert row.p_value == tests[row.observable] == min(tests.values())
        chosen.add(row.observable)
    assert chosen == {"A", "B"}, (
        "both are the more telling one somewhere, so the order of columns does not decide"
    )
