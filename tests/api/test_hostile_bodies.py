"""Whatever stands where in a body, the answer is none that the server is to blame for, and nothing breaks."""

from __future__ import annotations

from typing import Any

import pytest

from tests.api.study import Asked

pytestmark = [pytest.mark.django_db, pytest.mark.postgresql]

NASTY: tuple[Any, ...] = (
    None, True, False, 0, -1, 2**53, 1.5, -0.0, 1e300, 5e-324, "", " ", "x" * 5000, "\u202e\ufeff", "<b>'\";--",
    "é" * 200, "\U0001f9ea", [], [[]], [None], ["A"] * 300, {}, {"": ""}, {"A": {"A": {"A": []}}}, [{"name": {}}],
    {"kind": "as reported", "columns": [{"signal": [], "species": {}}]}, {"kind": "internal standard", "signals": []},
)  # fmt: skip
GOOD = (200, 201, 202)
REFUSED = (400, 403, 404, 409, 422)


def requests_of(asked: Asked) -> dict[str, dict[str, Any]]:
    """A good body for each POST that takes one."""
    study = asked.study
    table, project = study.tables[0], study.project.slug
    recipe = {"kind": "as reported", "columns": [{"signal": "A", "species": "A"}], "constant_u": 0.1}
    window = {"start": 0, "end": 100, "columns": ["A"], "left_out": {"A@0": "bubble"}}
    constant = {"name": "k", "start": 0.02, "scope": "own per run", "lower": 1e-5, "upper": 1, "starts": {},
                "prior": {"mean": 0.01, "sd": 1}, "positive": True, "group_by": None}  # fmt: skip
    return {
        f"runs/{table.run_id}/tables/": {"signal_table": table.signal_table_id, "name": "r", "recipe": recipe},
        f"tables/{table.pk}/supersede/": {"newer": table.pk, "reason": "better"},
        "mechanisms/": {"project": project, "name": "m", "text": "A --k--> B", "note": "n"},
        f"mechanisms/{study.version.mechanism_id}/versions/": {"text": "A --k--> B", "note": "n"},
        "mechanisms/check/": {"text": "A --k--> B"},
        "simulate/": {"text": "A --k--> B", "constants": {"k": 1}, "start": {"A": 1}, "times": [0, 1],
                      "temperature": 300, "rtol": 1e-6},
        "datasets/": {"project": project, "name": "d", "tables": [table.pk], "windows": {str(table.pk): window}},
        "fits/": {
            "dataset": study.dataset.pk,
            "mechanism_version": study.version.pk,
            "constants": [constant],
            "casting": {"compounds": {"A": "A"}, "columns": {"A": "A"}},
            "start_concentrations": [{"species": "A", "start": 0.01, "scope": "own per run"}],
            "settings": {"seed": 1, "starts": 1, "confidence": 0.9, "max_seconds": 60},
            "without_owners": [],
        },
    }  # fmt: skip


def mutations(value: Any) -> list[Any]:
    """The value with each of its parts in turn replaced by each nasty one."""
    found: list[Any] = list(NASTY)
    if isinstance(value, dict):
        for name, part in value.items():
            found += [{**value, name: changed} for changed in mutations(part)]
            found.append({key: kept for key, kept in value.items() if key != name})
        found.append({**value, "unheard of": 1})
    elif isinstance(value, list):
        for i, part in enumerate(value):
            found += [[*value[:i], changed, *value[i + 1 :]] for changed in mutations(part)]
    return found


@pytest.mark.parametrize("number", range(8))
def test_every_part_of_a_body_may_be_anything(number: int) -> None:
    asked = Asked.fresh(starts=(10.0,))
    path, body = list(requests_of(asked).items())[number]
    assert asked.script.post(path, body).status_code in (*GOOD, 422)
    statuses = set()
    for changed in mutations(body):
        if isinstance(changed, dict):
            response = asked.script.post(path, changed)
            assert response.status_code in (*GOOD, *REFUSED), (changed, response.content[:500])
            statuses.add(response.status_code)
            if response.status_code == 422:
                assert response.json()["problems"], changed
    assert 422 in statuses
