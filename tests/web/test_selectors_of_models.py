"""Reads of mechanisms, datasets, fits and verdicts as lists show them."""

from __future__ import annotations

import pytest

from kinetics_db.datasets.models import Dataset
from kinetics_db.datasets.selectors import datasets_in, item_lines
from kinetics_db.errors import NotFound
from kinetics_db.evidence.selectors import verdict_counts
from kinetics_db.fits.models import Fit
from kinetics_db.fits.selectors import fit_lines, fits_of_mechanisms, result_of
from kinetics_db.jobs.selectors import job_for
from kinetics_db.measurements.services import supersede_table
from kinetics_db.mechanisms.models import Mechanism
from kinetics_db.mechanisms.selectors import mechanisms_in, versions_of
from kinetics_db.projects.selectors import may_contribute
from kinetics_db.runs.models import Run
from tests.factories.people import make_member, make_user
from tests.web.study import RIGHT, Study


def test_a_mechanism_comes_with_its_newest_version(fitted: Study) -> None:
    fitted.version("first order", RIGHT + "ketone --k_back--> alcohol\n")
    found = {m.name: m for m in mechanisms_in(user=fitted.user, project_id=fitted.project.pk)}
    first = found["first order"]
    assert (first.number_of_versions, first.newest_number, first.newest_author) == (2, 2, "mira")
    numbers = [v.number for v in versions_of(user=fitted.user, mechanism=first)]
    assert numbers == [2, 1]
    assert found["second order"].newest_number == 1


def test_fits_are_counted_over_all_versions_of_a_mechanism(fitted: Study) -> None:
    newer = RIGHT + "ketone --k_back--> alcohol\n"
    assert fitted.version("first order", newer).number == 2
    fitted.fit("first order", RIGHT, Dataset.objects.get(), start=5e-3, compute=False)
    ids = {m.name: m.pk for m in Mechanism.objects.all()}
    assert fits_of_mechanisms(list(ids.values())) == {ids["first order"]: 2, ids["second order"]: 1}


def test_a_dataset_is_stale_once_a_table_of_it_is_superseded(fitted: Study) -> None:
    def listed() -> tuple[int, bool]:
        (dataset,) = datasets_in(user=fitted.user, project_id=fitted.project.pk)
        return dataset.number_of_tables, dataset.stale

    assert listed() == (2, False)
    run = Run.objects.get(code="K01")
    older = run.concentration_tables.get()
    newer = fitted.table(run, k=2.1e-3, name="again.txt")
    supersede_table(user=fitted.user, older=older, newer=newer, reason="phase was wrong")
    assert listed() == (2, True)
    assert [hasattr(item.table, "superseded_by") for item in item_lines(Dataset.objects.get())] == [
        True,
        False,
    ]
    assert all(fit.stale for fit in fit_lines(user=fitted.user, project_id=fitted.project.pk))


def test_a_fit_in_a_list_has_the_state_of_its_job_and_of_its_result(fitted: Study) -> None:
    fitted.fit("first order", RIGHT, Dataset.objects.get(), start=5e-3, compute=False)
    newest, *others = fit_lines(user=fitted.user, project_id=fitted.project.pk)
    assert (newest.job_state, newest.result_status, newest.stale) == ("waiting", None, False)
    for fit in others:
        result = result_of(Fit.objects.get(pk=fit.pk))
        assert result is not None
        assert (fit.result_status, fit.result_seconds) == (result.status, result.seconds)
        assert fit.job_state == job_for(kind="fit", subject_id=fit.pk).state == "done"


def test_verdicts_are_counted_for_each_fit_that_the_person_may_see(fitted: Study) -> None:
    right, wrong = Fit.objects.order_by("pk")
    counts = verdict_counts(user=fitted.user, fit_ids=[right.pk, wrong.pk])
    assert counts[right.pk] == {"agrees": 2}
    assert sum(counts[wrong.pk].values()) == 2 and "agrees" not in counts[wrong.pk]
    assert verdict_counts(user=make_user("stranger"), fit_ids=[right.pk]) == {}


def test_strangers_are_told_nothing(fitted: Study) -> None:
    stranger, project_id = make_user("stranger"), fitted.project.pk
    for read in (mechanisms_in, datasets_in, fit_lines):
        with pytest.raises(NotFound):
            read(user=stranger, project_id=project_id)
    with pytest.raises(NotFound):
        versions_of(user=stranger, mechanism=Mechanism.objects.get(name="first order"))


@pytest.mark.parametrize(("role", "may"), [("reader", False), ("contributor", True), ("owner", True)])
def test_readers_may_not_contribute(study: Study, role: str, may: bool) -> None:
    member = make_member(study.project, role)
    assert may_contribute(user=member, project_id=study.project.pk) is may
    assert may_contribute(user=make_user("stranger"), project_id=study.project.pk) is False
