"""The evidence grid over REST."""

from __future__ import annotations

import pytest

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.evidence.models import VERDICTS
from kinetics_db.fits.models import Fit
from kinetics_db.fits.services import request_fit
from kinetics_db.mechanisms.services import write_version
from tests.api.conftest import problem
from tests.api.study import Asked, costs_few_queries, fields_of, hides
from tests.factories.flow import compute_now

pytestmark = pytest.mark.django_db

QUERIES = 7
"""Person, project, columns, what has changed, runs, their codes, verdicts; whatever their number."""


@pytest.fixture
def asked() -> Asked:
    return Asked.fresh()


def other_fit(asked: Asked) -> Fit:
    study = asked.study
    version = write_version(user=study.user, project_id=study.project.pk, name="dimer", text="2 A --q--> 2 B")
    fit = request_fit(
        user=study.user,
        dataset=study.dataset,
        mechanism_version=version,
        constants=[Constant("q", start=1.0)],
    )
    compute_now(fit)
    return fit


def test_the_grid_is_runs_under_versions_with_verdicts_where_they_meet(asked: Asked) -> None:
    first, second = asked.fit(), other_fit(asked)
    body = costs_few_queries(asked.script, f"evidence/?project={asked.slug}", most=QUERIES)
    assert [c["fit"] for c in body["columns"]] == [first.pk, second.pk] and body["older_columns"] == 0
    column = body["columns"][0]
    assert column["version"] == {"id": asked.study.version.pk, "mechanism": "decay", "number": 1}
    assert column["dataset"] == "all v1" and column["status"] == "converged" and column["stale"] == []
    assert column["delta_aicc"] == 0.0 and body["columns"][1]["delta_aicc"] > 0
    assert [row["code"] for row in body["items"]] == ["R-1", "R-2"]
    for row, table in zip(body["items"], asked.study.tables, strict=True):
        assert row["run"] == table.run_id and [c["fit"] for c in row["cells"]] == [first.pk, second.pk]
        assert all(c["verdict"] in VERDICTS and c["table"] == f"{row['code']} t1" for c in row["cells"])


def test_the_grid_is_narrowed_and_cut_into_pages(asked: Asked) -> None:
    asked.fit()
    dimer = other_fit(asked)
    body = asked.script.get(f"evidence/?project={asked.slug}&mechanism=dimer").json()
    assert [c["fit"] for c in body["columns"]] == [dimer.pk]
    assert asked.script.get(f"evidence/?project={asked.slug}&mechanism=none").json()["items"] == []
    found = asked.script.get(f"evidence/?project={asked.slug}&q=R-2").json()
    assert [row["code"] for row in found["items"]] == ["R-2"]
    first = asked.script.get(f"evidence/?project={asked.slug}&size=1")
    assert [row["code"] for row in first.json()["items"]] == ["R-1"]
    after = first["Link"].split(">")[0].partition("/api/v1/")[2]
    assert [row["code"] for row in asked.script.get(after).json()["items"]] == ["R-2"]


def test_a_project_without_fits_has_an_empty_grid(asked: Asked) -> None:
    body = asked.script.get(f"evidence/?project={asked.slug}").json()
    assert body == {"columns": [], "older_columns": 0, "items": []}


@pytest.mark.parametrize(
    ("query", "field"),
    [("", "project"), ("project=x&q=T>warm", "q"), ("project=x&size=0", "size"), ("project=x&cursor=x", "cursor"),
     ("project=x&colour=1", "colour")],
)  # fmt: skip
def test_a_grid_that_cannot_be_is_refused(asked: Asked, query: str, field: str) -> None:
    query = query.replace("project=x", f"project={asked.slug}")
    assert fields_of(problem(asked.script.get(f"evidence/?{query}"), 422)) == [field]


def test_the_grid_is_for_members(asked: Asked) -> None:
    asked.fit()
    path = f"evidence/?project={asked.slug}"
    hides(path)
    assert asked.reader().get(path).status_code == asked.read_only().get(path).status_code == 200
