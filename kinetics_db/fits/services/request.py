"""Asking for a fit, stopping it, trying it again."""

from __future__ import annotations

from collections.abc import Sequence

from kinetics_db.accounts.models import User
from kinetics_db.datasets.models import Dataset
from kinetics_db.engine.canonical import digest
from kinetics_db.engine.fitting.checks import check_fit
from kinetics_db.engine.fitting.problem import Constant, Settings, StartConcentration
from kinetics_db.engine.version import ENGINE_VERSION
from kinetics_db.errors import InvalidInput, Problem
from kinetics_db.fits.casting import Casting, complete_casting
from kinetics_db.fits.experiments import DataOfFit, data_of, experiments_of
from kinetics_db.fits.models import Fit
from kinetics_db.fits.request import FORMAT, FitRequest
from kinetics_db.jobs import services as jobs
from kinetics_db.jobs.models import Job
from kinetics_db.jobs.selectors import job_for
from kinetics_db.mechanisms.models import MechanismVersion
from kinetics_db.mechanisms.selectors import network_of
from kinetics_db.projects.selectors import require_contributor
from kinetics_db.projects.services import lock_project
from kinetics_db.provenance.services import note_write, recording, save_record

JOB_KIND = "fit"


def request_fit(
    *,
    user: User,
    dataset: Dataset,
    mechanism_version: MechanismVersion,
    constants: Sequence[Constant],
    casting: Casting | None = None,
    start_concentrations: Sequence[StartConcentration] = (),
    settings: Settings | None = None,
    without_owners: Sequence[str] = (),
) -> Fit:
    """Ask for a fit in the background, or give the existing one back when the request is the same.

    The whole problem is put together and checked first, so a fit that cannot be posed is refused with every
    reason at once and leaves nothing behind.
    """
    project_id = dataset.project_id
    require_contributor(user=user, project_id=project_id)
    if mechanism_version.mechanism.project_id != project_id:
        raise InvalidInput("the mechanism is of another project", field="mechanism_version")
    network = network_of(mechanism_version)
    data = data_of(dataset)
    whole = complete_casting(
        network, casting or Casting({}, {}), compounds=data.compounds, columns=data.columns
    )
    request = FitRequest(
        casting=whole,
        constants=tuple(constants),
        start_concentrations=tuple(start_concentrations),
        settings=settings or Settings(),
        without_owners=tuple(without_owners),
    )
    experiments, nuisances = experiments_of(data, whole, without_owners=request.without_owners)
    _known_owners(data, request)
    check_fit(
        network, experiments, request.constants, request.start_concentrations, nuisances, request.settings
    )
    content = {
        "format": FORMAT,
        # With names and numbers: 'which version explains which data' is asked of versions, not of texts.
        "dataset": {"name": dataset.name, "version": dataset.number, "digest": dataset.digest},
        "mechanism": {
            "name": mechanism_version.mechanism.name,
            "version": mechanism_version.number,
            "digest": mechanism_version.digest,
        },
        "engine": ENGINE_VERSION,
        **request.to_plain(),
    }
    with recording(user=user):
        lock_project(project_id)  # two equal requests at once must find each other
        fit = Fit.objects.filter(project_id=project_id, digest=digest(content)).first()
        if fit is None:
            fit = save_record(
                Fit(
                    project_id=project_id,
                    dataset=dataset,
                    mechanism_version=mechanism_version,
                    engine_version=ENGINE_VERSION,
                ),
                user=user,
                content=content,
                parents=[dataset, mechanism_version],
                project_id=project_id,
                label=f"{mechanism_version} on {dataset}",
                verb="asked for",
            )
        jobs.request_job(user=user, kind=JOB_KIND, subject_id=fit.pk)
    return fit


def _known_owners(data: DataOfFit, request: FitRequest) -> None:
    """Refuse a cause to leave out that the data do not have: it would be a typing error passed in silence."""
    if not request.without_owners:
        return
    _, every = experiments_of(data, request.casting)
    owners = sorted({nuisance.owner for nuisance in every})
    unknown = [owner for owner in request.without_owners if owner not in owners]
    if unknown:
        raise InvalidInput(
            [
                Problem(
                    f"no error of the data is owned by '{owner}'",
                    field="without_owners",
                    cure=", ".join(owners),
                )
                for owner in unknown
            ]
        )


def stop_fit(*, user: User, fit: Fit) -> Job:
    """Ask a fit to stop; its best point so far is kept as a stopped result."""
    require_contributor(user=user, project_id=fit.project_id)
    with recording(user=user):
        job = jobs.request_stop(job=job_for(kind=JOB_KIND, subject_id=fit.pk))
        _note(fit, "asked to stop")
    return job


def retry_fit(*, user: User, fit: Fit) -> Job:
    """Compute a fit again that was stopped, failed or crashed."""
    require_contributor(user=user, project_id=fit.project_id)
    with recording(user=user):
        job = jobs.retry_job(job=job_for(kind=JOB_KIND, subject_id=fit.pk))
        _note(fit, "asked for again")
    return job


def _note(fit: Fit, verb: str) -> None:
    note_write(
        verb=verb,
        record_kind=Fit.kind(),
        record_id=fit.pk,
        project_id=fit.project_id,
        label=str(fit),
        digest_after=fit.digest,
    )
