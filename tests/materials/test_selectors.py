"""Reads about materials."""

from __future__ import annotations

from typing import Any

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from kinetics_db.errors import NotFound
from kinetics_db.materials.selectors import compounds_with_newest, lots_in, material_names, stocks_in
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.paging import page_of
from kinetics_db.projects.models import Project
from tests.factories.people import make_member, make_project, make_user


@pytest.fixture
def project(db: None) -> Project:
    """Two compounds (one revised), two lots, a stock; and another project with names of its own."""
    project = make_project(make_user("mira"))
    about: dict[str, Any] = {"user": project.created_by, "project_id": project.pk}
    enter_compound(**about, name="ester", molar_mass=200.0)
    enter_compound(**about, name="ester", molar_mass=201.0, density=(1.1, "g/mL"), hazard_statements=["H315"])
    enter_compound(**about, name="amine", molar_mass=60.0)
    enter_lot(**about, code="E-2", compound="ester", purity=0.9)
    enter_lot(**about, code="E-2", compound="ester", purity=0.95)
    enter_lot(**about, code="A-1", compound="amine")
    make_up_stock(**about, code="S-1", portions=[Portion(1.0, "g", lot="A-1")], volume=(100.0, "mL"))
    make_up_stock(**about, code="S-1", portions=[Portion(2.0, "g", lot="A-1")], volume=(100.0, "mL"))
    other = make_project()
    enter_compound(user=other.created_by, project_id=other.pk, name="secret", molar_mass=1.0)
    return project


def test_each_material_comes_in_its_newest_revision(project: Project) -> None:
    about: dict[str, Any] = {"user": project.created_by, "project_id": project.pk}
    with CaptureQueriesContext(connection) as queries:
        compounds = [
            (c.compound.name, c.number, c.content["molar_mass"]) for c in compounds_with_newest(**about)
        ]
        lots = [
            (lot.lot.code, lot.number, lot.lot.compound.name, lot.content["purity"])
            for lot in lots_in(**about)
        ]
        stocks = [
            (s.stock.code, s.number, s.created_by.username, s.content["components"][0]["concentration"])
            for s in stocks_in(**about)
        ]
    assert compounds == [("amine", 1, 60.0), ("ester", 2, 201.0)]
    assert lots == [("A-1", 1, "amine", 1.0), ("E-2", 2, "ester", 0.95)]
    assert stocks == [("S-1", 2, "mira", pytest.approx(2.0 / 60.0 / 0.1))]
    assert len(queries) == 6  # each kind and each time the role


def test_materials_can_be_paged(project: Project) -> None:
    found = compounds_with_newest(user=project.created_by, project_id=project.pk)
    first = page_of(found, order=("compound__name", "id"), size=1)
    second = page_of(found, order=("compound__name", "id"), size=1, cursor=first.next)
    assert [c.compound.name for c in (*first.items, *second.items)] == ["amine", "ester"]
    assert second.next is None


def test_names_of_all_materials_come_in_one_query(project: Project) -> None:
    with CaptureQueriesContext(connection) as queries:
        names = material_names(user=project.created_by, project_id=project.pk)
    assert names.compounds == ("amine", "ester")
    assert names.lots == (("A-1", "amine"), ("E-2", "ester"))
    assert names.stocks == ("S-1",)
    assert len(queries) == 2  # the role, and the names


@pytest.mark.parametrize("read", [compounds_with_newest, lots_in, stocks_in, material_names])
def test_readers_may_look_and_strangers_may_not(project: Project, read: Any) -> None:
    assert read(user=make_member(project, "reader"), project_id=project.pk)
    with pytest.raises(NotFound):
        read(user=make_user(), project_id=project.pk)
