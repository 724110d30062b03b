"""Reads about datasets."""

from __future__ import annotations

from dataclasses import dataclass

from django.db.models import F, Q, QuerySet

from kinetics_db.accounts.models import User
from kinetics_db.datasets.models import Dataset, DatasetItem
from kinetics_db.errors import NotFound
from kinetics_db.projects.selectors import NOT_VISIBLE, require_reader


def dataset_by_id(*, user: User, dataset_id: int) -> Dataset:
    """One dataset that the person may see."""
    dataset = Dataset.objects.filter(pk=dataset_id).first()
    if dataset is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=dataset.project_id)
    return dataset


def items_of(dataset: Dataset) -> list[DatasetItem]:
    """The runs and tables of a dataset in order, with what fits need of them, in one query."""
    return list(
        dataset.items.select_related("run_revision__run", "table__reduction", "table__signal_table").order_by(
            "order"
        )
    )


@dataclass(frozen=True)
class Staleness:
    """Why results on a dataset are no longer current; empty when they are."""

    reasons: tuple[str, ...] = ()

    def __bool__(self) -> bool:
        return bool(self.reasons)


def staleness_of(dataset_ids: list[int]) -> dict[int, Staleness]:
    """For each dataset: tables that were superseded and runs that were revised since, in one query."""
    reasons: dict[int, list[str]] = {dataset_id: [] for dataset_id in dataset_ids}
    items = DatasetItem.objects.filter(dataset_id__in=dataset_ids).select_related(
        "run_revision__run", "table__superseded_by"
    )
    items = items.defer("run_revision__canonical", "table__canonical", "table__blob")
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


def stale_dataset_ids() -> QuerySet:
    """Ids of the datasets whose data have changed since, to stand inside another query."""
    revised = Q(run_revision__number__lt=F("run_revision__run__latest_number"))
    superseded = Q(table__superseded_by__isnull=False)
    return DatasetItem.objects.filter(revised | superseded).values("dataset_id")


def table_ids_of(dataset_id: int) -> list[int]:
    """Ids of a dataset's concentration tables, in its order."""
    return list(
        DatasetItem.objects.filter(dataset_id=dataset_id).order_by("order").values_list("table_id", flat=True)
    )
