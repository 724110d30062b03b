"""An invented project through the services, exactly as somebody's own entries and uploads would go."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeVar

from django.utils import timezone

from kinetics_db.datasets.services import freeze_dataset
from kinetics_db.demo.invented.exports import export_file
from kinetics_db.demo.invented.plan import Plan, PlannedRun, Rival, Solution
from kinetics_db.demo.invented.reality import Exported
from kinetics_db.demo.invented.recipe import recipe_of, stated_noise
from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.errors import NotFound
from kinetics_db.fits.casting import Casting
from kinetics_db.fits.services import request_fit
from kinetics_db.materials.services import Portion, enter_compound, enter_lot, make_up_stock
from kinetics_db.measurements.services import reduce_signals, store_file
from kinetics_db.mechanisms.services import write_version
from kinetics_db.projects.selectors import project_named
from kinetics_db.projects.services import create_project
from kinetics_db.runs.entry import Amount, ChargeEntry, RunEntry
from kinetics_db.runs.selectors import run_named
from kinetics_db.runs.services import log_run, revise_run

if TYPE_CHECKING:  # entrances never import models; names of types are no import
    from kinetics_db.accounts.models import User
    from kinetics_db.datasets.models import Dataset
    from kinetics_db.fits.models import Fit
    from kinetics_db.materials.models import LotRevision, StockRevision
    from kinetics_db.measurements.models import ConcentrationTable
    from kinetics_db.mechanisms.models import MechanismVersion
    from kinetics_db.projects.models import Project
    from kinetics_db.provenance.models import ImmutableRecord
    from kinetics_db.runs.models import RunRevision

Say = Callable[[str], None]
R = TypeVar("R", bound="ImmutableRecord")


@dataclass(frozen=True)
class Loaded:
    """What stands in the database: the frozen choice of all runs, and each rival with its version.

    ``runs`` counts them; ``is_new`` tells whether this call has entered anything.
    """

    project: Project
    dataset: Dataset
    versions: Sequence[tuple[Rival, MechanismVersion]]
    runs: int
    is_new: bool


def load(
    plan: Plan, exports: Sequence[Exported], rivals: Sequence[Rival], *, user: User, say: Say = lambda _: None
) -> Loaded:
    """Enter materials and runs, upload and reduce the files, write the rivals, freeze the dataset.

    May be called again: whatever is there already and unchanged is used as it is, and ``say`` is told of
    nothing but what was done.
    """
    begun = timezone.now()

    def new(records: Sequence[R]) -> list[R]:
        return [record for record in records if record.created >= begun]

    project = _project(plan, user)
    lots, stocks = _enter_materials(plan, user, project.pk)
    bottles, solutions = len(new(lots)), len(new(stocks))
    if bottles or solutions:
        say(f"{counted(bottles, 'lot')} and {counted(solutions, 'solution')} entered")
    revisions = [_logged(plan, export.run, user, project.pk) for export in exports]
    if new(revisions):
        say(f"{counted(len(new(revisions)), 'run')} logged")
    tables = [
        _uploaded(plan, export, revision, user) for export, revision in zip(exports, revisions, strict=True)
    ]
    if new(tables):
        points = sum(table.rows * len(plan.signals) for table in new(tables))
        say(f"{counted(len(new(tables)), 'file')} read and reduced, {points} concentrations")
    versions = [
        write_version(user=user, project_id=project.pk, name=rival.name, text=rival.text, note=rival.note)
        for rival in rivals
    ]
    if new(versions):
        say(f"{counted(len(new(versions)), 'mechanism version')} written")
    dataset = freeze_dataset(
        user=user, project_id=project.pk, name="all runs", table_ids=[table.pk for table in tables]
    )
    if new([dataset]):
        say(f"the dataset of {counted(len(tables), 'run')} frozen")
    every = [*lots, *stocks, *revisions, *tables, *versions, dataset]
    return Loaded(
        project=project,
        dataset=dataset,
        versions=list(zip(rivals, versions, strict=True)),
        runs=len(revisions),
        is_new=bool(new(every)),
    )


def counted(number: int, what: str) -> str:
    """'1 run', '24 runs'."""
    return f"{number} {what}" if number == 1 else f"{number} {what}s"


def ask_for_fits(plan: Plan, loaded: Loaded, *, user: User) -> list[Fit]:
    """Ask for the fit of every rival to all runs, each temperature with constants of its own."""
    return [
        request_fit(
            user=user,
            dataset=loaded.dataset,
            mechanism_version=version,
            constants=constants_of(rival),
            casting=Casting({plan.standard: None}, {}),
        )
        for rival, version in loaded.versions
    ]


def constants_of(rival: Rival) -> list[Constant]:
    """The rival's constants, one value at each temperature, all from one start."""
    return [
        Constant(name, start, "in a group", group_by="temperature") for name, start in rival.starts.items()
    ]


def _project(plan: Plan, user: User) -> Project:
    try:
        return project_named(user=user, slug=plan.slug)
    except NotFound:
        return create_project(
            user=user, slug=plan.slug, name=plan.name, description=plan.description, invented=True
        )


def _enter_materials(
    plan: Plan, user: User, project_id: int
) -> tuple[list[LotRevision], list[StockRevision]]:
    for substance in plan.substances:
        enter_compound(
            user=user,
            project_id=project_id,
            name=substance.name,
            formula=substance.formula,
            molar_mass=substance.molar_mass,
        )
    lots = [
        enter_lot(
            user=user,
            project_id=project_id,
            code=bottle.code,
            compound=bottle.substance,
            purity=bottle.purity,
            purity_uncertainty=bottle.purity_u,
        )
        for bottle in plan.bottles
    ]
    return lots, [_made_up(solution, user, project_id) for solution in plan.solutions]


def _made_up(solution: Solution, user: User, project_id: int) -> StockRevision:
    weighed, volume = solution.weighed, solution.volume
    return make_up_stock(
        user=user,
        project_id=project_id,
        code=solution.code,
        portions=[Portion(weighed.value, weighed.unit, lot=solution.bottle, uncertainty=weighed.uncertainty)],
        volume=(volume.value, volume.unit),
        volume_uncertainty=volume.uncertainty,
        made_on=solution.made_on,
    )


def _logged(plan: Plan, run: PlannedRun, user: User, project_id: int) -> RunRevision:
    charges = [
        ChargeEntry(addition.amount, lot=addition.source)
        if plan.bottle(addition.source) is not None
        else ChargeEntry(addition.amount, stock=addition.source)
        for addition in run.additions
    ]
    entry = RunEntry(
        code=run.code,
        charges=charges,
        total_volume=run.volume,
        temperature=Amount(run.celsius, "degC"),
        started=run.started,
        replicate_of=run.replicate_of,
        control_kind=run.control_kind,
        notes=run.notes,
    )
    try:
        known = run_named(user=user, project_id=project_id, code=run.code)
    except NotFound:
        return log_run(user=user, project_id=project_id, entry=entry)
    return revise_run(
        user=user,
        run=known,
        entry=entry,
        based_on=known.latest_number,
        reason="the invented plan was changed",
    )


def _uploaded(plan: Plan, export: Exported, revision: RunRevision, user: User) -> ConcentrationTable:
    name, data = export_file(export)
    signals = store_file(user=user, run=revision.run, name=name, data=data)
    recipe = recipe_of(plan, export.run, revision.content["start"], stated_noise(export.noise))
    return reduce_signals(
        user=user, signal_table=signals, name=f"against {recipe['standard_owner']}", recipe=recipe
    )
