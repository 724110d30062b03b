"""Every form of every page in hostile and clumsy hands: a page answers, nothing typed is lost, nothing is stored by
the way."""

from __future__ import annotations

from itertools import chain
from typing import Any

import pytest
from django.core.files.uploadedfile import SimpleUploadedFile
from django.http import QueryDict
from django.test import Client
from django.urls import reverse

from kinetics_db.materials.services import Portion, enter_lot, make_up_stock
from kinetics_db.projects.services import create_project
from kinetics_db.web.rows import MOST_ROWS
from kinetics_db.web.urls import urlpatterns
from tests.access.world import World, make_world, undone
from tests.factories.people import make_user
from tests.web.hostile import FILES, TEXTS
from tests.web.hostile_hands import (
    Hands,
    all_fields_at_once,
    fields_astray,
    one_field_at_a_time,
    posted,
)
from tests.web.page_forms import PageForm, values_of
from tests.web.study import Study

# What a page answers does not hang on the database; the second pass on SQLite need not repeat it.
pytestmark = pytest.mark.postgresql

READABLE = b"t / min;A / mM;B / mM\n0;100,5;0\n1;90;10,25\n2;80;20\n3;70;30\n"

#: Pages with a form by the test that tries them, with the queries of their addresses.
PAGES: dict[str, tuple[tuple[str, str], ...]] = {
    "people": (("new-project", ""), ("account", ""), ("tokens", ""), ("members", "")),
    "materials": (
        ("new-compound", "?revise=alcohol"),
        ("new-lot", "?revise=L-1"),
        ("new-stock", "?revise=S-1"),
    ),
    "a new run": (("new-run", "?copy={run_id}"),),
    "a revision": (("revise-run", ""), ("run", "")),
    "files": (("new-file", ""), ("supersede-table", "")),
    "recipes": (("reduce", "?kind=internal standard"), ("reduce", "?kind=as reported&like=none")),
    "models": (("new-mechanism", "?from={version_id}"), ("new-dataset", "")),
    "fits": (("new-fit", "?dataset={dataset_id}&version={version_id}"), ("fit", "")),
}
STEP = 7
"""Of a form's further buttons each gets every seventh text."""
ANOTHER = "another project's"
"""Before the name of a record of a project that the person may not see."""


@pytest.fixture
def world(db: None) -> World:
    """The world of the access tests with a lot, a stock and a fit that waits, and records of somebody else."""
    made = make_world()
    owner, project = made.people["owner"], made.study.project
    where = {"user": owner, "project_id": project.pk}
    enter_lot(**where, code="L-1", compound="alcohol", purity=0.98, purity_uncertainty=0.01)
    portions = [Portion(1.0, "g", lot="L-1", uncertainty=0.01)]
    make_up_stock(**where, code="S-1", portions=portions, volume=(100.0, "mL"), volume_uncertainty=0.1)
    made.keys["fit_id"] = made.keys["open_fit_id"]
    stella = make_user("sven")
    theirs = Study(stella, create_project(user=stella, slug="nearby", name="A third project"))
    run = theirs.run("T01")
    dataset = theirs.dataset()
    fit = theirs.fit("theirs", "alcohol --k_t--> ketone\n", dataset, compute=False)
    made.keys |= {
        f"{ANOTHER} run": run.pk,
        f"{ANOTHER} table": run.concentration_tables.get().pk,
        f"{ANOTHER} dataset": dataset.pk,
        f"{ANOTHER} version": fit.mechanism_version_id,
        f"{ANOTHER} fit": fit.pk,
    }
    return made


def address(world: World, name: str, query: str = "") -> str:
    pattern = next(p for p in urlpatterns if p.name == name)
    kwargs = {key: world.keys.get(key, 1) for key in pattern.pattern.converters}
    return reverse(f"web:{name}", kwargs=kwargs) + query.format(**world.keys)


def texts(world: World) -> dict[str, bytes]:
    """The hostile texts, and the records of somebody else by their ids."""
    return TEXTS | {name: str(key).encode() for name, key in world.keys.items() if name.startswith(ANOTHER)}


def forms_tried(world: World, hands: Hands, group: str) -> list[PageForm]:
    forms: list[PageForm] = []
    for name, query in PAGES[group]:
        where = address(world, name, query)
        response = hands.client.get(where)
        assert response.status_code == 200, where
        forms += posted(response.content.decode(), where)
        if name == "new-file":  # what was understood of a file is a form too
            response = hands.client.post(where, {"file": SimpleUploadedFile("K01.csv", READABLE)})
            forms += posted(response.content.decode(), where)
    return list({(form.name, form.key): form for form in forms}.values())


def test_every_page_with_a_form_is_tried(world: World) -> None:
    client = world.client("owner")
    tried = {name for pages in PAGES.values() for name, _ in pages}
    for pattern in urlpatterns:
        response = client.get(address(world, pattern.name))
        if response.status_code == 200 and "html" in response.headers["Content-Type"]:
            forms = posted(response.content.decode(), "")
            assert not forms or pattern.name in tried, pattern.name


@pytest.mark.parametrize("group", PAGES)
def test_hostile_values_get_an_answer_and_lose_nothing(world: World, group: str) -> None:
    hands, values, done = Hands(world.client("owner")), texts(world), set()
    for turn, form in enumerate(forms_tried(world, hands, group)):
        if form.key in done:  # another button of the same form, or what a part of it asks by itself
            some = dict(list(values.items())[turn % STEP :: STEP])
            tries = [all_fields_at_once(form, some)]
        else:
            done.add(form.key)
            tries = [one_field_at_a_time(form, values, turn=turn), all_fields_at_once(form, values)]
            tries += [fields_astray(form)]
        for what, sent, typed in chain(*tries):
            hands.send(form, sent, what, typed=typed)
    assert hands.answers > 20
    assert not hands.complaints, "\n".join(hands.complaints)


@pytest.mark.slow
@pytest.mark.timeout(3600)
@pytest.mark.parametrize("group", PAGES)
def test_every_hostile_value_in_every_field(world: World, group: str) -> None:
    hands, values = Hands(world.client("owner")), texts(world)
    first = {(form.action, form.key): form for form in reversed(forms_tried(world, hands, group))}
    for form in first.values():
        for what, sent, typed in chain(one_field_at_a_time(form, values), fields_astray(form, every=True)):
            hands.send(form, sent, what, typed=typed)
    assert not hands.complaints, "\n".join(hands.complaints)


def test_hostile_files_get_an_answer_and_are_not_stored(world: World) -> None:
    hands = Hands(world.client("owner"))
    where = address(world, "new-file")
    for label, (name, data) in FILES.items():
        hands.upload(where, name, data, label)
    assert not hands.complaints, "\n".join(hands.complaints)


def parameters_of(client: Client, where: str, monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """What a page reads from the query of its address."""
    read: dict[str, None] = {}
    get = QueryDict.get

    def noted(self: QueryDict, key: Any, *default: Any) -> Any:
        read[key] = None
        return get(self, key, *default)

    with monkeypatch.context() as patch:
        patch.setattr(QueryDict, "get", noted)
        client.get(where)
    return [name for name in read if name != "csrfmiddlewaretoken"]


def ask_with_hostile_queries(world: World, monkeypatch: pytest.MonkeyPatch, *, step: int) -> None:
    """Every parameter of every page with every ``step``-th text, all texts in turn."""
    hands, values = Hands(world.client("owner")), list(texts(world).items())
    found: list[str] = []
    for pattern in urlpatterns:
        where = address(world, pattern.name)
        for name in parameters_of(hands.client, where, monkeypatch):
            found.append(name)
            for label, value in values[len(found) % step :: step]:
                hands.get(where, [(name, value[:6_000])], f"{where} with {name} {label}")
    known = {
        "cursor",
        "q",
        "by",
        "r",
        "like",
        "kind",
        "dataset",
        "version",
        "copy",
        "revise",
        "from",
        "project",
    }
    assert known <= set(found)
    assert not hands.complaints, "\n".join(hands.complaints)


def test_hostile_queries_get_an_answer(world: World, monkeypatch: pytest.MonkeyPatch) -> None:
    ask_with_hostile_queries(world, monkeypatch, step=4)


@pytest.mark.slow
def test_every_hostile_query_gets_an_answer(world: World, monkeypatch: pytest.MonkeyPatch) -> None:
    ask_with_hostile_queries(world, monkeypatch, step=1)


@pytest.mark.parametrize("query", ["%00", "x" * 300], ids=["a NUL", "too long a name"])
def test_a_search_in_a_project_that_cannot_be_is_no_page(world: World, query: str) -> None:
    response = world.client("owner").get(f"{address(world, 'search')}?project={query}")
    assert response.status_code == 404
    assert "x" * 100 not in response.content.decode()


@pytest.mark.parametrize("line", ["10\n20 mL", "1\r\n2\n3"])
def test_a_filter_with_a_line_break_is_refused_in_words(world: World, line: str) -> None:
    response = world.client("owner").get(address(world, "runs"), {"q": line})
    assert response.status_code == 400
    assert "is no number with a unit" in response.content.decode()


def test_nothing_is_done_without_the_forms_token(world: World) -> None:
    client = Client(enforce_csrf_checks=True, raise_request_exception=False)
    client.force_login(world.people["owner"])
    for pattern in urlpatterns:
        with undone():
            response = client.post(address(world, pattern.name), {"name": "x"})
        assert response.status_code == 403, pattern.name
        assert "<h1>" in response.content.decode()


def test_a_run_of_thousands_of_charges_is_refused_in_time(world: World) -> None:
    hands = Hands(world.client("owner"))
    form = forms_tried(world, hands, "a new run")[0]
    own = form.as_it_stands()
    many = [(f"charges-{i}-source", b"nobody's compound") for i in range(2, 240)]
    hands.send(form, [*own, *many], "more charges than a run may have", typed=many)
    for number, status in ((5_000, 422), (9_900, 422), (12_000, 400)):
        rows = [(f"charges-{i}-source", b"alcohol") for i in range(1, number)]
        assert hands.send(form, [*own, *rows], f"{number} charges") == status
    assert not hands.complaints, "\n".join(hands.complaints)


def test_one_more_row_than_a_page_has_room_for_is_refused_in_words(world: World) -> None:
    client = world.client("owner")
    rows = {f"charges-{i}-source": "alcohol" for i in range(1, MOST_ROWS + 1)}
    response = client.post(address(world, "new-run"), {**rows, "charges": "add"})
    assert response.status_code == 422
    assert f"at most {MOST_ROWS}" in response.content.decode()


def test_what_was_typed_for_a_table_stays_when_the_filter_no_longer_finds_it(world: World) -> None:
    client, where = world.client("owner"), address(world, "new-dataset")
    field = f"t{world.keys['newer_table_id']}-leave"
    response = client.post(where, {"filter": "code K99", field: "alcohol@3: bubble", "show": "1"})
    assert set(values_of(response.content.decode())[field]) == {"alcohol@3: bubble"}


def test_a_mechanism_checked_without_scripts_can_be_stored_from_there(world: World) -> None:
    client = world.client("owner")
    checked = client.post(address(world, "check-mechanism"), {"name": "third", "text": "alcohol --k--> acid"})
    form = next(f for f in posted(checked.content.decode(), "elsewhere") if "check" not in f.action)
    response = client.post(form.action, {name: value.decode() for name, value in form.as_it_stands()})
    assert response.status_code == 302 and response["Location"].startswith("/versions/")
