"""Verdicts on one run, as its page lists them."""

from __future__ import annotations

from dataclasses import replace

from kinetics_db.evidence.selectors import explanations_of_run
from kinetics_db.runs.models import Run
from kinetics_db.web.present.explanations import explanation_list
from tests.web.study import Study


def test_a_stopped_fit_does_not_take_the_place_of_a_finished_one(fitted: Study) -> None:
    known = explanations_of_run(user=fitted.user, run_id=Run.objects.get(code="K01").pk)
    finished = known.verdicts[0]
    stopped = replace(finished, fit_id=finished.fit_id + 1000, fit_status="stopped")
    shown = explanation_list(replace(known, verdicts=[stopped, *known.verdicts]))
    assert [line.found for line in shown.lines] == list(known.verdicts)
    assert shown.earlier == 1


def test_a_stopped_fit_stands_after_the_finished_ones_where_it_is_the_only_one(fitted: Study) -> None:
    known = explanations_of_run(user=fitted.user, run_id=Run.objects.get(code="K01").pk)
    first, second = known.verdicts
    stopped = replace(first, fit_status="stopped")
    shown = explanation_list(replace(known, verdicts=[stopped, second]))
    assert [line.found for line in shown.lines] == [second, stopped]
    assert "the fit is stopped" in shown.lines[1].reasons
