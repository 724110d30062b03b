"""Compounds, lots and stocks with their revisions."""

from __future__ import annotations

import pytest

from kinetics_db.errors import InvalidInput
from kinetics_db.materials.models import CompoundRevision, Stock, StockRevision
from kinetics_db.materials.selectors import components_of, compound_named, lot_named, stock_named
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.projects.models import Project
from kinetics_db.provenance.selectors import lineage
from tests.factories.people import make_project

pytestmark = pytest.mark.django_db


@pytest.fixture
def project() -> Project:
    project = make_project()
    enter_compound(user=project.created_by, project_id=project.pk, name="salt", molar_mass=58.44)
    enter_lot(
        user=project.created_by,
        project_id=project.pk,
        code="S-1",
        compound="salt",
        purity=0.99,
        purity_uncertainty=0.002,
    )
    return project


def stock(project: Project, **changes: object) -> StockRevision:
    values: dict[str, object] = {
        "code": "ST-1",
        "portions": [Portion(584.4, "mg", lot="S-1", uncertainty=0.3)],
        "volume": (100.0, "mL"),
        "volume_uncertainty": 0.1,
        **changes,
    }
    return make_up_stock(user=project.created_by, project_id=project.pk, **values)  # type: ignore[arg-type]


def test_a_stock_knows_its_concentration_and_who_owns_its_errors(project: Project) -> None:
    part = stock(project).content["components"][0]
    assert part["concentration"] == pytest.approx(0.099)  # 0.5844 g x 0.99 / 58.44 g/mol / 0.1 L
    assert {e["owner"]: pytest.approx(e["relative_u"], rel=1e-9) for e in part["shared"]} == {
        "stock ST-1 salt": 0.3 / 584.4,
        "stock ST-1 volume": 0.001,
        "lot S-1 purity": 0.002 / 0.99,
    }


def test_the_components_of_a_stock_are_kept_as_rows_with_their_lots(project: Project) -> None:
    (part,) = components_of(stock(project))
    assert part.lot_revision and part.lot_revision.lot.code == "S-1"
    assert part.concentration == pytest.approx(0.099)


def test_entering_the_same_again_gives_the_same_revision(project: Project) -> None:
    assert stock(project).pk == stock(project).pk
    again = enter_compound(user=project.created_by, project_id=project.pk, name="salt", molar_mass=58.44)
    assert again.number == 1


def test_a_correction_is_the_next_revision_and_keeps_the_one_before(project: Project) -> None:
    first = compound_named(project_id=project.pk, name="salt")
    second = enter_compound(
        user=project.created_by, project_id=project.pk, name="salt", molar_mass=58.443, reason="table of 2021"
    )
    assert (second.number, second.reason) == (2, "table of 2021")
    assert CompoundRevision.objects.get(pk=first.pk).content["molar_mass"] == 58.44
    up = {link.parent for link in lineage(kind="compound revision", record_id=second.pk, upward=True)}
    assert ("compound revision", first.pk) in up


def test_a_stock_comes_from_its_lot_and_the_lot_from_its_compound(project: Project) -> None:
    revision = stock(project)
    up = {link.parent[0] for link in lineage(kind="stock revision", record_id=revision.pk, upward=True)}
    assert up == {"lot revision", "compound revision"}
    assert stock_named(project_id=project.pk, code="ST-1") == revision
    assert lot_named(project_id=project.pk, code="S-1").content["purity"] == 0.99


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"portions": []}, "holds nothing"),
        ({"portions": [Portion(1.0, "mg", lot="S-9")]}, "no lot 'S-9'"),
        ({"portions": [Portion(1.0, "mg", lot="S-1", compound="salt")]}, "a lot or a compound"),
        ({"portions": [Portion(1.0, "stone", lot="S-1")]}, "stone"),
        ({"portions": [Portion(-1.0, "mg", lot="S-1")]}, "-1.0 mg"),
        ({"volume": (0.0, "mL")}, "volume"),
        ({"volume": (1.0, "h")}, "h"),
        ({"code": " "}, "code"),
    ],
)
def test_a_stock_that_cannot_be_made_up_is_refused_and_leaves_nothing(
    project: Project, changes: dict[str, object], says: str
) -> None:
    with pytest.raises(InvalidInput) as refused:
        stock(project, **changes)
    assert says in str(refused.value)
    assert not Stock.objects.exists()


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"molar_mass": 0.0}, "molar mass"),
        ({"molar_mass": float("nan")}, "molar mass"),
        ({"density": (1.0, "g")}, "g"),
    ],
)
def test_a_compound_with_impossible_numbers_is_refused(
    project: Project, changes: dict[str, object], says: str
) -> None:
    with pytest.raises(InvalidInput) as refused:
        enter_compound(user=project.created_by, project_id=project.pk, name="other", **changes)  # type: ignore[arg-type]
    assert says in str(refused.value)


@pytest.mark.parametrize(("purity", "u"), [(98.0, 0.0), (0.0, 0.0), (0.9, -0.1), (float("nan"), 0.0)])
def test_a_purity_is_a_mass_fraction(project: Project, purity: float, u: float) -> None:
    with pytest.raises(InvalidInput):
        enter_lot(
            user=project.created_by,
            project_id=project.pk,
            code="S-2",
            compound="salt",
            purity=purity,
            purity_uncertainty=u,
        )


def test_a_lot_stays_with_its_compound(project: Project) -> None:
    enter_compound(user=project.created_by, project_id=project.pk, name="sugar", molar_mass=342.3)
    with pytest.raises(InvalidInput, match="is of 'salt'"):
        enter_lot(user=project.created_by, project_id=project.pk, code="S-1", compound="sugar")
