"""Reads about datasets."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from django.db.models import Count, Exists, F, OuterRef, Q, QuerySet, Subquery
from django.db.models.functions import Coalesce

from kinetics_db.accounts.models import User
from kinetics_db.datasets.models import Dataset, DatasetItem
from kinetics_db.errors import NotFound
from kinetics_db.projects.selectors import NOT_VISIBLE, projects_visible_to, require_reader


def dataset_by_id(*, user: User, dataset_id: int) -> Dataset:
    """One dataset that the person may see."""
    dataset = Dataset.objects.select_related("project", "created_by").filter(pk=dataset_id).first()
    if dataset is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=dataset.project_id)
    return dataset


def datasets_in(*, user: User, project_id: int) -> QuerySet[Dataset]:
    """Datasets of a project, newest first, each with its ``number_of_tables`` and whether it is ``stale``;
    one query, without canonical bytes."""
    require_reader(user=user, project_id=project_id)
    # Counted for the rows of a page only, where a join would first count the tables of every dataset.
    own = DatasetItem.objects.filter(dataset=OuterRef("pk")).order_by()
    counted = own.values("dataset").annotate(n=Count("pk")).values("n")
    return (
        Dataset.objects.filter(project_id=project_id)
        .select_related("created_by")
        .defer("canonical")
        .annotate(
            number_of_tables=Coalesce(Subquery(counted), 0),
            stale=Exists(_changed_since().filter(dataset=OuterRef("pk"))),
        )
        .order_by("-created", "-id")
    )


def items_of(dataset: Dataset) -> list[DatasetItem]:
    """The runs and tables of a dataset in order, with what fits need of them, in one query."""
    return list(dataset.items.select_related("run_revision__run", "table").order_by("order"))


@dataclass(frozen=True)
class ItemNumbers:
    """One table of a dataset: its run's code and revision, its own number, its numbers as they are stored."""

    code: str
    run_revision: int
    table: int
    blob: bytes


def numbers_of(dataset: Dataset) -> list[ItemNumbers]:
    """The numbers of a dataset in order, with nothing else of its records, in one query."""
    fields = ("run_revision__run__code", "run_revision__number", "table__number", "table__blob")
    return [ItemNumbers(*row) for row in dataset.items.order_by("order").values_list(*fields)]


def item_lines(dataset: Dataset) -> list[DatasetItem]:
    """The runs and tables of a dataset in order, as a page lists them: without any numbers, in two queries."""
    found = dataset.items.select_related(
        "run_revision__run", "table__reduction", "table__superseded_by"
    ).prefetch_related("table__columns")
    heavy = ("run_revision__canonical", "table__canonical", "table__blob", "table__reduction__canonical")
    return list(found.defer(*heavy, "table__superseded_by__canonical").order_by("order"))


@dataclass(frozen=True)
class Staleness:
    """Why results on a dataset are no longer current; empty when they are."""

    reasons: tuple[str, ...] = ()

    def __bool__(self) -> bool:
        return bool(self.reasons)


def staleness_of(dataset_ids: list[int]) -> dict[int, Staleness]:
    """For each dataset: tables that were superseded and runs that were revised since, in one query."""
    reasons: dict[int, list[str]] = {dataset_id: [] for dataset_id in dataset_ids}
    items = (
        _changed_since()
        .filter(dataset_id__in=dataset_ids)
        .select_related("run_revision__run", "table__superseded_by")
    )
    items = items.defer(
        "run_revision__canonical", "table__canonical", "table__blob", "table__superseded_by__canonical"
    )
    for item in items.order_by("dataset_id", "order"):
        run = item.run_revision.run
        if run.latest_number > item.run_revision.number:
            reasons[item.dataset_id].append(
                f"run {run.code} has been revised (r{item.run_revision.number} used, r{run.latest_number} is newest)"
            )
        if hasattr(item.table, "superseded_by"):
            reasons[item.dataset_id].append(
                f"table {item.table.number} of run {run.code} has been superseded"
            )
    return {dataset_id: Staleness(tuple(found)) for dataset_id, found in reasons.items()}


def stale_dataset_ids(*, project_id: int | None = None) -> QuerySet:
    """Ids of the datasets (of one project) whose data have changed since, to stand inside another query."""
    changed = _changed_since().values("dataset_id")
    return changed if project_id is None else changed.filter(dataset__project_id=project_id)


def _changed_since() -> QuerySet[DatasetItem]:
    revised = Q(run_revision__number__lt=F("run_revision__run__latest_number"))
    superseded = Q(table__superseded_by__isnull=False)
    return DatasetItem.objects.filter(revised | superseded)


def stale_among(dataset_ids: Iterable[int]) -> set[int]:
    """Those of the datasets whose data have changed since, in one query."""
    changed = _changed_since().filter(dataset_id__in=set(dataset_ids)).order_by()
    return set(changed.values_list("dataset_id", flat=True).distinct())


def table_ids_of(dataset_id: int) -> list[int]:
    """Ids of a dataset's concentration tables, in its order."""
    return list(
        DatasetItem.objects.filter(dataset_id=dataset_id).order_by("order").values_list("table_id", flat=True)
    )


def datasets_called(*, user: User, text: str, project_id: int | None = None) -> QuerySet[Dataset]:
    """Datasets whose name holds the text, of all projects that the person may see or of one, with the project."""
    found = Dataset.objects.filter(project__in=projects_visible_to(user), name__icontains=text)
    found = found if project_id is None else found.filter(project_id=project_id)
    return found.select_related("project").defer("canonical").order_by("name", "-number", "id")
