"""Lists cut into pages by cursors."""

from __future__ import annotations

import base64
import json
from datetime import timedelta
from typing import Any

import pytest
from django.db import connection
from django.db.models import Value
from django.db.models.functions import Length
from django.test.utils import CaptureQueriesContext
from hypothesis import given
from hypothesis import strategies as st

from kinetics_db.errors import InvalidInput
from kinetics_db.paging import Page, page_of
from kinetics_db.projects.models import Project
from kinetics_db.provenance.models import StoredBytes
from tests.factories.people import make_project, make_user

NEWEST = ("-created", "-id")
SMALLEST = ("size", "-sha256", "id")


@pytest.fixture
def rows(db: None) -> list[StoredBytes]:
    """Twenty-three rows of five sizes, made at three moments."""
    made = StoredBytes.objects.bulk_create(
        StoredBytes(sha256=f"{i * 7919 % 1000:064d}", size=i % 5) for i in range(23)
    )
    for i, row in enumerate(made):
        row.created += timedelta(days=i % 3)
    StoredBytes.objects.bulk_update(made, ["created"])
    return made


def walked(order: tuple[str, ...], size: int) -> list[Page[StoredBytes]]:
    pages = [page_of(StoredBytes.objects.all(), order=order, size=size)]
    while pages[-1].next:
        pages.append(page_of(StoredBytes.objects.all(), order=order, size=size, cursor=pages[-1].next))
    return pages


@pytest.mark.parametrize("order", [NEWEST, SMALLEST, ("-size", "created", "-id"), ("id",), ("-id",)])
@pytest.mark.parametrize("size", [1, 5, 22, 23, 24])
def test_pages_one_after_the_other_are_the_whole_list(
    rows: list[StoredBytes], order: tuple[str, ...], size: int
) -> None:
    found = [row.pk for page in walked(order, size) for row in page.items]
    assert found == list(StoredBytes.objects.order_by(*order).values_list("pk", flat=True))


@pytest.mark.parametrize("order", [NEWEST, SMALLEST])
def test_the_way_back_shows_the_same_pages(rows: list[StoredBytes], order: tuple[str, ...]) -> None:
    pages = walked(order, 5)
    assert (pages[0].previous, pages[-1].next) == (None, None)
    page, back = pages[-1], [pages[-1].items]
    while page.previous:
        page = page_of(StoredBytes.objects.all(), order=order, size=5, cursor=page.previous)
        assert page.next is not None
        back.append(page.items)
    assert [list(items) for items in reversed(back)] == [list(page.items) for page in pages]


def test_a_page_costs_one_query(rows: list[StoredBytes]) -> None:
    first = page_of(StoredBytes.objects.all(), order=NEWEST, size=5)
    for cursor in (None, first.next):
        with CaptureQueriesContext(
            connection,
        ) as queries:
            page_of(StoredBytes.objects.all(), order=NEWEST, size=5, cursor=cursor)
        assert len(queries) == 1
        assert "LIMIT 6" in queries[0]["sql"]


def test_rows_added_before_a_page_shift_nothing(rows: list[StoredBytes]) -> None:
    first = page_of(StoredBytes.objects.all(), order=("-id",), size=5)
    StoredBytes.objects.create(sha256="f" * 64, size=1)
    second = page_of(StoredBytes.objects.all(), order=("-id",), size=5, cursor=first.next)
    assert [row.pk for row in second.items] == [row.pk for row in rows[::-1][5:10]]


def test_an_empty_list_has_one_empty_page(db: None) -> None:
    assert page_of(StoredBytes.objects.all(), order=NEWEST) == Page([], None, None)


def test_a_page_that_lost_its_rows_still_leads_back(rows: list[StoredBytes]) -> None:
    last = walked(("id",), 20)[0].next
    StoredBytes.objects.filter(pk__in=[row.pk for row in rows[20:]]).delete()
    empty = page_of(StoredBytes.objects.all(), order=("id",), size=20, cursor=last)
    assert (list(empty.items), empty.next) == ([], None)
    back = page_of(StoredBytes.objects.all(), order=("id",), size=20, cursor=empty.previous)
    assert list(back.items) == rows[:20]


def test_related_fields_and_annotations_order_a_list_too(db: None) -> None:
    anna, zoe = make_user("anna"), make_user("zoe")
    for user, slug in ((zoe, "a"), (anna, "ccc"), (anna, "bb"), (zoe, "dddd")):
        make_project(user, slug)
    people = Project.objects.select_related("created_by")
    lengths = Project.objects.annotate(length=Length("slug"), none=Value(0))
    for queryset, order, expected in (
        (people, ("created_by__username", "-id"), ["bb", "ccc", "dddd", "a"]),
        (lengths, ("none", "-length", "id"), ["dddd", "ccc", "bb", "a"]),
    ):
        first = page_of(queryset, order=order, size=2)
        second = page_of(queryset, order=order, size=2, cursor=first.next)
        assert [project.slug for project in (*first.items, *second.items)] == expected


def forged(*content: Any) -> str:
    return base64.urlsafe_b64encode(json.dumps(content).encode()).decode().rstrip("=")


NOW = "2026-03-01T00:00:00+00:00"


@pytest.mark.parametrize(
    "cursor",
    [
        "x",
        "é",
        "=====",
        "A" * 2001,
        "null",
        forged(),
        forged("after"),
        forged("after", list(NEWEST), [NOW]),
        forged("after", list(NEWEST), {"a": 1}),
        forged("sideways", list(NEWEST), [NOW, 1]),
        forged("sideways", list(NEWEST), None),
        forged("after", list(NEWEST), [NOW, "1"]),
        forged("after", list(NEWEST), [NOW, 1.5]),
        forged("after", list(NEWEST), [NOW, True]),
        forged("after", list(NEWEST), [NOW, 10**30]),
        forged("after", list(NEWEST), [NOW, float("nan")]),
        forged("after", list(NEWEST), [NOW, None]),
        forged("after", list(NEWEST), ["yesterday", 1]),
        forged("after", list(NEWEST), ["2026-03-01T00:00:00", 1]),
        forged("after", list(NEWEST), ["0001-01-01T00:00:00+23:00", 1]),
        forged("after", list(NEWEST), [5, 1]),
        base64.urlsafe_b64encode(b"[" * 1000).decode(),
        base64.urlsafe_b64encode(b"\xff\xfe").decode(),
        base64.urlsafe_b64encode(b'{"a":1,"b":2,"c":3}').decode(),
    ],
)
def test_a_damaged_cursor_is_refused(db: None, cursor: str) -> None:
    with pytest.raises(InvalidInput) as caught:
        page_of(StoredBytes.objects.all(), order=NEWEST, cursor=cursor)
    (problem,) = caught.value.problems
    assert (problem.field, bool(problem.cure)) == ("cursor", True)


@pytest.mark.parametrize("text", ["a\0b", "\ud800", 5])
def test_a_cursor_holds_only_text_that_a_database_holds(db: None, text: Any) -> None:
    with pytest.raises(InvalidInput, match="damaged"):
        page_of(
            StoredBytes.objects.all(), order=SMALLEST, cursor=forged("after", list(SMALLEST), [1, text, 1])
        )


@given(st.text(max_size=60))
def test_no_text_breaks_the_reading_of_cursors(text: str) -> None:
    try:
        page_of(StoredBytes.objects.none(), order=NEWEST, cursor=text)
    except InvalidInput as error:
        assert error.problems[0].field == "cursor"


def test_a_cursor_of_another_order_is_refused(rows: list[StoredBytes]) -> None:
    other = page_of(StoredBytes.objects.all(), order=("-id",), size=5).next
    with pytest.raises(InvalidInput, match="another order"):
        page_of(StoredBytes.objects.all(), order=("id",), size=5, cursor=other)


@pytest.mark.parametrize("size", [0, -1, 201, True, "50", 2.0])
def test_a_page_holds_1_to_200_rows(db: None, size: Any) -> None:
    with pytest.raises(InvalidInput) as caught:
        page_of(StoredBytes.objects.all(), order=NEWEST, size=size)
    assert caught.value.problems[0].field == "size"


def test_an_order_that_leaves_equals_open_is_a_mistake_of_the_caller() -> None:
    with pytest.raises(ValueError, match="ends with 'id'"):
        page_of(StoredBytes.objects.all(), order=("-created",))


@pytest.mark.postgresql
def test_postgresql_enters_the_index_at_the_cursor(db: None) -> None:
    from kinetics_db.runs.models import Run

    project = make_project()
    Run.objects.bulk_create(
        Run(project=project, code=f"R{i}", created_by=project.created_by) for i in range(3000)
    )
    middle = page_of(Run.objects.filter(project=project), order=NEWEST, size=200)
    with connection.cursor() as cursor:
        cursor.execute("ANALYZE runs_run")
    with CaptureQueriesContext(connection) as queries:
        page_of(Run.objects.filter(project=project), order=NEWEST, size=10, cursor=middle.next)
    with connection.cursor() as cursor:
        cursor.execute("EXPLAIN " + queries[0]["sql"])
        plan = "\n".join(row[0] for row in cursor.fetchall())
    assert "Index Scan using run_newest" in plan
    assert "Index Cond" in plan and "created" in plan.split("Index Cond")[1].splitlines()[0]
