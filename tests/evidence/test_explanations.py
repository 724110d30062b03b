"""Which model versions explain a run."""

from __future__ import annotations

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.errors import NotFound
from kinetics_db.evidence.selectors import Explanations, explanations_of_run
from kinetics_db.fits.services import request_fit
from kinetics_db.measurements.services import supersede_table
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.mechanisms.services import write_version
from kinetics_db.runs.models import Run
from kinetics_db.runs.selectors import entry_of, latest_revision
from kinetics_db.runs.services import revise_run
from tests.factories.flow import compute_now, make_reported_table
from tests.factories.people import make_member, make_user
from tests.factories.small import SmallStudy, decay_file, make_study


def fit(study: SmallStudy, version: MechanismVersion, start: float = 0.01) -> int:
    wanted = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=version,
        constants=[Constant("k", start=start)],
    )
    compute_now(wanted)
    return wanted.pk


@pytest.fixture
def study(db: None) -> SmallStudy:
    """First order fitted to R-1 and R-2; second order was never tried."""
    found = make_study()
    fit(found, found.version)
    write_version(user=found.user, project_id=found.project.pk, name="second order", text="2 A --k--> 2 B")
    return found


def explained(study: SmallStudy, run: Run | None = None) -> Explanations:
    return explanations_of_run(user=study.user, run_id=(run or study.tables[0].run).pk)


def test_a_verdict_says_which_version_how_well_and_by_whom(study: SmallStudy) -> None:
    found = explained(study)
    (verdict,) = found.verdicts
    assert (str(verdict.version), verdict.dataset, verdict.fit_status) == ("decay v1", "all v1", "converged")
    assert verdict.verdict in ("agrees", "consistent")
    assert verdict.p_value is not None and verdict.nrmse is not None
    assert (verdict.table_id, verdict.table, verdict.revision) == (study.tables[0].pk, 1, 1)
    assert (verdict.asked_by, verdict.stale) == (study.user.username, ())
    assert [str(version) for version in found.untried] == ["second order v1"]
    assert (found.run, found.more) == (study.tables[0].run, False)


def test_a_version_that_was_tried_is_no_longer_untried_and_stands_first(study: SmallStudy) -> None:
    version = MechanismVersion.objects.get(mechanism__name="second order")
    fit_id = fit(study, version, start=1.0)
    found = explained(study)
    assert [str(verdict.version) for verdict in found.verdicts] == ["second order v1", "decay v1"]
    assert found.verdicts[0].fit_id == fit_id
    assert found.untried == []


def test_why_a_verdict_is_no_longer_current(study: SmallStudy) -> None:
    first, second = (table.run for table in study.tables)
    older = study.tables[0]
    newer = make_reported_table(
        study.user, first, decay_file(10.0, 0.01, seed=7), {"A": "A", "B": "B"}, name="again.csv"
    )
    supersede_table(user=study.user, older=older, newer=newer, reason="baseline")
    assert explained(study, first).verdicts[0].stale == ("table 1 has been superseded",)
    assert explained(study, second).verdicts[0].stale == ("other data of its dataset have changed",)
    entry = entry_of(latest_revision(second))
    changed = type(entry)(**{**vars(entry), "notes": "stirred longer"})
    revise_run(user=study.user, run=second, entry=changed, based_on=1)
    assert explained(study, second).verdicts[0].stale == ("the run has been revised (r1 used, r2 is newest)",)


def test_a_run_that_no_fit_used_has_no_verdict(study: SmallStudy) -> None:
    run = make_study(starts=(5.0,)).tables[0].run  # of another project, whose version was never fitted
    user = run.project.created_by
    found = explanations_of_run(user=user, run_id=run.pk)
    assert found.verdicts == []
    assert [str(version) for version in found.untried] == ["decay v1"]


def test_queries_do_not_grow_with_the_number_of_fits(study: SmallStudy) -> None:
    with CaptureQueriesContext(connection) as few:
        explained(study)
    single = freeze_dataset(
        user=study.user, project_id=study.project.pk, name="first", table_ids=[study.tables[0].pk]
    )
    for dataset, start in ((single, 0.01), (study.dataset, 0.02), (study.dataset, 0.005)):
        again = request_fit(
            user=study.user,
            dataset=dataset,
            mechanism_version=study.version,
            constants=[Constant("k", start=start)],
        )
        compute_now(again)
    with CaptureQueriesContext(connection) as many:
        assert len(explained(study).verdicts) == 4
    assert len(many) == len(few) == 6


def test_readers_may_look_and_strangers_may_not(study: SmallStudy) -> None:
    run_id = study.tables[0].run_id
    assert explanations_of_run(user=make_member(study.project, "reader"), run_id=run_id).verdicts
    for user, wanted in ((make_user(), run_id), (study.user, 10**9)):
        with pytest.raises(NotFound):
            explanations_of_run(user=user, run_id=wanted)
