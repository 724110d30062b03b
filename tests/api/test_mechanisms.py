"""Mechanisms and their versions over REST, and texts that are only checked."""

from __future__ import annotations

from typing import Any

import pytest

from kinetics_db.engine.network import mechanism_digest, parse_mechanism
from kinetics_db.mechanisms.models import MechanismVersion
from tests.api.conftest import Lab, problem
from tests.api.study import Asked, costs_few_queries, fields_of, hides

TEXT = "A + B --k_1--> C\nC <--k_2 / k_3--> D  # slow\nobserve total = [C] + 2*[D]\n"


def written(lab: Lab, text: str = TEXT, **more: Any) -> Any:
    body = {"project": "hydrolysis", "name": "stepwise", "text": text, **more}
    return lab.script.post("mechanisms/", {name: value for name, value in body.items() if value is not ...})


def test_a_text_is_stored_as_a_version_and_said_back(lab: Lab) -> None:
    response = written(lab, note="the first idea")
    assert response.status_code == 201
    body = lab.script.get(response["Location"].removeprefix("/api/v1/")).json()
    assert body == response.json()
    assert (body["mechanism"], body["number"], body["note"]) == ("stepwise", 1, "the first idea")
    assert body["text"] == TEXT and body["digest"] == mechanism_digest(parse_mechanism(TEXT))
    network = body["network"]
    assert network["species"] == ["A", "B", "C", "D"] and network["must_be_charged"] == ["A", "B"]
    assert network["constants"] == [
        {"name": "k_1", "unit": "L/mol/s", "computed": False},
        {"name": "k_2", "unit": "1/s", "computed": False},
        {"name": "k_3", "unit": "1/s", "computed": False},
    ]
    assert network["observables"] == [{"name": "total", "terms": {"C": 1.0, "D": 2.0}}]
    assert "#" not in network["written"] and parse_mechanism(network["written"])


def test_a_text_that_says_the_same_is_the_same_version(lab: Lab) -> None:
    first = written(lab)
    again = written(
        lab, "# another comment\nB + A --k_1--> C\nD <--k_3 / k_2--> C\nobserve total = 2*[D] + [C]"
    )
    assert again.status_code == 200 and again.json() == first.json()
    assert MechanismVersion.objects.count() == 1


def test_the_text_itself_is_immutable_plain_text(lab: Lab) -> None:
    path = written(lab)["Location"].removeprefix("/api/v1/")
    response = lab.script.get(path, Accept="text/plain")
    assert response.content.decode() == TEXT and response["Content-Type"] == "text/plain; charset=utf-8"
    assert "immutable" in response["Cache-Control"]
    assert lab.script.get(path, Accept="text/plain", If_None_Match=response["ETag"]).status_code == 304
    assert lab.script.get(path)["ETag"] != response["ETag"]
    problem(lab.script.get(path, Accept="text/html"), 406)


def test_the_next_version_is_written_under_its_mechanism(lab: Lab) -> None:
    first = written(lab).json()
    path = f"mechanisms/{first['mechanism_id']}/versions/"
    second = lab.script.post(path, {"text": "A + B --k_1--> C", "note": "simpler"})
    assert second.status_code == 201 and second.json()["number"] == 2
    rows = costs_few_queries(lab.script, path)["items"]
    assert [(r["number"], r["note"], r["created_by"]) for r in rows] == [
        (2, "simpler", "mira"),
        (1, "", "mira"),
    ]
    assert "text" not in rows[0]


def test_mechanisms_are_listed_with_their_newest_version_in_few_queries(lab: Lab) -> None:
    for name in ("stepwise", "direct", "reversible"):
        written(lab, name=name)
    newest = written(lab, "A --k--> B", name="direct").json()
    rows = costs_few_queries(lab.script, "mechanisms/?project=hydrolysis")["items"]
    assert [(row["name"], row["versions"]) for row in rows] == [
        ("direct", 2),
        ("reversible", 1),
        ("stepwise", 1),
    ]
    assert rows[0]["newest"]["id"] == newest["id"] and rows[0]["newest"]["number"] == 2
    first = lab.script.get("mechanisms/?project=hydrolysis&size=2")
    assert len(first.json()["items"]) == 2 and "project=hydrolysis" in first["Link"]


def test_a_list_needs_its_project(lab: Lab) -> None:
    for query in ("", "?project=", "?size=3"):
        assert fields_of(problem(lab.script.get(f"mechanisms/{query}"), 422)) == ["project"]
    problem(lab.script.get("mechanisms/?project=nowhere"), 404)
    assert fields_of(problem(lab.script.get("mechanisms/?project=hydrolysis&x=1"), 422)) == ["x"]


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"text": ...}, "text"), ({"text": ""}, "text"), ({"text": 3}, "text"), ({"text": None}, "text"),
        ({"text": "# nothing"}, "text"), ({"text": "A --k--> B " * 20_000}, "text"),
        ({"text": "A --{ " + "(" * 4000 + "[A]" + ")" * 4000 + " }--> B"}, "text"),
        ({"name": ...}, "name"), ({"name": " "}, "name"), ({"name": "x" * 121}, "name"), ({"name": "a\x07"}, "name"),
        ({"note": "x" * 1001}, "note"), ({"note": {}}, "note"), ({"project": ...}, "project"),
        ({"project": 3}, "project"), ({"version": 1}, "version"),
    ],
)  # fmt: skip
def test_a_version_that_cannot_be_is_refused_with_its_field(
    lab: Lab, change: dict[str, Any], field: str
) -> None:
    assert field in fields_of(problem(written(lab, **change), 422))
    assert not MechanismVersion.objects.exists()


def test_mistakes_in_a_text_have_line_and_column(lab: Lab) -> None:
    (found,) = problem(written(lab, "A --k--> B\nB --k2-> C"), 422)["problems"]
    assert (found["field"], found["line"]) == ("text", 2) and found["column"] > 1 and found["message"]


def test_a_text_of_nothing_but_mistakes_is_answered_shortly(lab: Lab) -> None:
    response = written(lab, "x\n" * 5000)
    body = problem(response, 422)
    assert len(body["problems"]) == 100 and body["detail"].endswith("and 4900 more")


def test_a_check_says_what_a_text_says_and_keeps_nothing(lab: Lab) -> None:
    response = lab.script.post("mechanisms/check/", {"text": TEXT})
    body = response.json()
    assert response.status_code == 200 and body["valid"] is True and body["problems"] == []
    assert body["network"]["canonical"]["observables"] == {"total": {"C": 1.0, "D": 2.0}}
    assert not MechanismVersion.objects.exists()


@pytest.mark.parametrize(
    "text",
    ["A ->", "", "((((", "A --k--> B\nwhere k = k", "\u202e", "\x01", "A --k--> B" * 30_000, "é\n" * 3000],
)
def test_a_text_that_cannot_be_used_is_an_answer_of_a_check(lab: Lab, text: str) -> None:
    response = lab.script.post("mechanisms/check/", {"text": text})
    body = response.json()
    assert response.status_code == 200 and body["valid"] is False and body["network"] is None
    assert 1 <= len(body["problems"]) <= 100 and all(p["message"] for p in body["problems"])
    assert (body["further_problems"] > 0) == (text.startswith("é"))


def test_warnings_leave_a_text_usable(lab: Lab) -> None:
    body = lab.script.post("mechanisms/check/", {"text": "A --k--> B\nC --q--> C"}).json()
    (warned,) = body["problems"]
    assert body["valid"] is True and body["network"]["species"] == ["A", "B", "C"]
    assert (warned["severity"], warned["line"]) == ("warning", 2)


@pytest.mark.parametrize(
    ("body", "field"), [({}, "text"), ({"text": []}, "text"), ({"text": "A", "x": 1}, "x")]
)
def test_a_check_needs_a_text(lab: Lab, body: dict[str, Any], field: str) -> None:
    assert field in fields_of(problem(lab.script.post("mechanisms/check/", body), 422))


def test_a_check_takes_no_text_that_nobody_can_store(lab: Lab) -> None:
    problem(lab.script.post("mechanisms/check/", {"text": "A\x00"}), 400)
    problem(lab.script.post("mechanisms/check/", b'{"text": "\\ud800"}'), 400)


@pytest.mark.django_db
def test_mechanisms_are_for_members_and_written_by_contributors() -> None:
    asked = Asked.fresh(starts=(10.0,))
    version = asked.study.version
    for path in (
        f"mechanisms/?project={asked.slug}",
        f"mechanisms/{version.mechanism_id}/versions/",
        f"versions/{version.pk}/",
    ):
        hides(path)
        assert asked.reader().get(path).status_code == 200
    hides(f"versions/{version.pk}/", Accept="text/plain")
    problem(asked.script.get("versions/999999/"), 404)
    problem(asked.script.post("mechanisms/999999/versions/", {"text": "A --k--> B"}), 404)
    text = "A --k--> 2 B"
    asked.refuses_others("mechanisms/", {"project": asked.slug, "name": "theirs", "text": text})
    asked.refuses_others(f"mechanisms/{version.mechanism_id}/versions/", {"text": text})
    assert asked.read_only().post("mechanisms/check/", {"text": text}).json()["valid"] is True
