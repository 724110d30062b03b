"""Reads that the pages brought with them."""

from __future__ import annotations

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.errors import NotFound
from kinetics_db.materials.services import Portion, enter_compound, make_up_stock
from kinetics_db.projects.models import Membership
from kinetics_db.projects.selectors import require_reader, role_in, roles_remembered
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.models import RunRevision
from kinetics_db.runs.selectors import start_concentrations
from kinetics_db.runs.services import log_run
from tests.factories.people import make_member, make_project, make_user
from tests.web.study import Study


def revision_of(study: Study, *charges: ChargeEntry) -> RunRevision:
    entry = RunEntry(code="S1", charges=charges, total_volume=Amount(10.0, "mL"))
    return log_run(user=study.user, project_id=study.project.pk, entry=entry)


def stock(study: Study, code: str, *, uncertainty: float) -> None:
    enter_compound(user=study.user, project_id=study.project.pk, name="alcohol", molar_mass=100.0)
    make_up_stock(
        user=study.user,
        project_id=study.project.pk,
        code=code,
        portions=[Portion(10.0, "mmol", compound="alcohol", uncertainty=uncertainty)],
        volume=(10.0, "mL"),
    )


def test_two_portions_of_one_flask_go_wrong_together(study: Study) -> None:
    stock(study, "A", uncertainty=0.1)  # 1 mol/L within 1 %
    (found,) = start_concentrations(
        revision_of(
            study, ChargeEntry(Amount(1.0, "mL"), stock="A"), ChargeEntry(Amount(1.0, "mL"), stock="A")
        )
    )
    assert found.compound == "alcohol"
    assert found.value == pytest.approx(0.2)
    assert found.standard_uncertainty == pytest.approx(0.002)


def test_portions_of_two_flasks_go_wrong_independently(study: Study) -> None:
    # JCGM 100:2008, 5.1.2: independent contributions add in squares.
    stock(study, "A", uncertainty=0.1)
    stock(study, "B", uncertainty=0.1)
    (found,) = start_concentrations(
        revision_of(
            study, ChargeEntry(Amount(1.0, "mL"), stock="A"), ChargeEntry(Amount(1.0, "mL"), stock="B")
        )
    )
    assert found.standard_uncertainty == pytest.approx(0.001 * 2**0.5)


def test_a_role_is_looked_up_once_inside_the_block_and_anew_after_it(db: None) -> None:
    project = make_project()
    reader = make_member(project, "reader")
    with roles_remembered():
        with CaptureQueriesContext(connection) as queries:
            assert [role_in(user=reader, project_id=project.pk) for _ in range(3)] == ["reader"] * 3
        assert len(queries) == 1
    Membership.objects.filter(user=reader).update(role="contributor")
    assert role_in(user=reader, project_id=project.pk) == "contributor"


def test_a_remembered_role_is_nobody_elses(db: None) -> None:
    project, other = make_project(), make_project()
    with roles_remembered():
        require_reader(user=project.created_by, project_id=project.pk)
        for user, project_id in ((make_user(), project.pk), (project.created_by, other.pk)):
            with pytest.raises(NotFound):
                require_reader(user=user, project_id=project_id)
