"""Asking for fits: casting, refusals, the same request twice."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from kinetics_db.engine.fitting.problem import Constant, Prior, Settings, StartConcentration
from kinetics_db.errors import InvalidInput, NotFound, NotPermitted
from kinetics_db.fits.casting import Casting
from kinetics_db.fits.models import Fit
from kinetics_db.fits.request import FitRequest
from kinetics_db.fits.services import request_fit, retry_fit, stop_fit
from kinetics_db.jobs.models import Job
from kinetics_db.mechanisms.services import write_version
from kinetics_db.provenance.models import AuditEntry
from tests.factories.people import make_member, make_project
from tests.factories.small import SmallStudy, make_study

pytestmark = pytest.mark.django_db
K = Constant("k", start=0.002)


@pytest.fixture
def study() -> SmallStudy:
    return make_study()


def ask(study: SmallStudy, **changes: Any) -> Fit:
    values = {
        "user": study.user,
        "dataset": study.dataset,
        "mechanism_version": study.version,
        "constants": [K],
        **changes,
    }
    return request_fit(**values)


def refused(study: SmallStudy, **changes: Any) -> str:
    before = AuditEntry.objects.count()
    with pytest.raises(InvalidInput) as error:
        ask(study, **changes)
    assert not Fit.objects.exists() and not Job.objects.exists()
    assert AuditEntry.objects.count() == before
    return str(error.value)


def mechanism(study: SmallStudy, text: str) -> Any:
    return write_version(user=study.user, project_id=study.project.pk, name="other", text=text)


def test_the_same_request_returns_the_existing_fit(study: SmallStudy) -> None:
    first = ask(study)
    assert ask(study).pk == first.pk
    assert Job.objects.filter(kind="fit").count() == 1


def test_another_start_value_or_seed_is_another_fit(study: SmallStudy) -> None:
    first = ask(study)
    assert ask(study, constants=[replace(K, start=0.003)]).pk != first.pk
    assert ask(study, settings=Settings(seed=2)).pk != first.pk


def test_the_order_in_which_constants_are_given_does_not_matter(study: SmallStudy) -> None:
    version = mechanism(study, "A --k--> B\nB --k_2--> A")
    constants = [K, Constant("k_2", start=1e-4)]
    first = ask(study, mechanism_version=version, constants=constants)
    assert ask(study, mechanism_version=version, constants=constants[::-1]).pk == first.pk


def test_a_request_reads_back_from_its_stored_bytes(study: SmallStudy) -> None:
    prior = Prior(mean=0.01, sd=0.5)
    fit = ask(
        study,
        constants=[
            replace(K, prior=prior, lower=1e-4, upper=1.0, scope="in a group", group_by="temperature")
        ],
        start_concentrations=[StartConcentration("B", start=1e-4)],
    )
    request = FitRequest.from_plain(Fit.objects.get(pk=fit.pk).content)
    assert request.constants[0].prior == prior
    assert request.constants[0].group_by == "temperature"
    assert request.start_concentrations[0].species == "B"
    assert request.to_plain() == FitRequest.from_plain(request.to_plain()).to_plain()


def test_a_column_without_a_namesake_has_to_be_assigned(study: SmallStudy) -> None:
    said = refused(study, mechanism_version=mechanism(study, "A --k--> P"))
    assert "column 'B' is not assigned" in said and "P" in said and "null to leave it out" in said


def test_a_column_can_be_cast_or_left_out_in_so_many_words(study: SmallStudy) -> None:
    version = mechanism(study, "A --k--> P")
    cast = ask(study, mechanism_version=version, casting=Casting({}, {"B": "P"}))
    left = ask(study, mechanism_version=version, casting=Casting({}, {"B": None}))
    assert cast.pk != left.pk
    assert left.content["casting"]["columns"] == {"A": "A", "B": None}


def test_an_observable_that_no_column_is_assigned_to_is_refused(study: SmallStudy) -> None:
    version = mechanism(study, "A --k--> B\nobserve total = [A] + [B]")
    assert "no column is assigned to the observable 'total'" in refused(study, mechanism_version=version)


def test_a_compound_that_plays_no_species_is_refused(study: SmallStudy) -> None:
    said = refused(study, mechanism_version=mechanism(study, "S --k--> B"), casting=Casting({}, {"A": None}))
    assert "compound 'A' is not assigned" in said


@pytest.mark.parametrize(
    ("casting", "says"),
    [
        (Casting({"A": "Q"}, {}), "cast as 'Q', which the mechanism does not have"),
        (Casting({"X": "A"}, {}), "names the compound 'X', which the data do not have"),
        (Casting({}, {"B": "A"}), "two columns are cast as 'A'"),
        (Casting({}, {"A": None, "B": None}), "no column is cast as anything"),
    ],
)
def test_a_casting_that_cannot_be_meant_is_refused(study: SmallStudy, casting: Casting, says: str) -> None:
    assert says in refused(study, casting=casting)


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"constants": []}, "k"),
        ({"constants": [K, Constant("k_9", start=1.0)]}, "k_9"),
        ({"constants": [replace(K, start=float("nan"))]}, "k"),
        ({"constants": [replace(K, lower=1.0, upper=0.1)]}, "k"),
        ({"constants": [replace(K, lower=1.0)]}, "k"),
        ({"constants": [replace(K, scope="everywhere")]}, "everywhere"),
        ({"constants": [replace(K, scope="in a group", group_by="lamp")]}, "lamp"),
        ({"constants": [replace(K, prior=Prior(mean=1.0, sd=-1.0))]}, "sd"),
        ({"start_concentrations": [StartConcentration("Q", start=1.0)]}, "Q"),
        ({"settings": Settings(error_model="guess")}, "guess"),  # type: ignore[arg-type]
        ({"settings": Settings(rtol=1.0)}, "tolerance"),
        ({"without_owners": ["stock 99"]}, "stock 99"),
    ],
)
def test_a_fit_that_cannot_start_is_refused_before_anything_is_stored(
    study: SmallStudy, changes: dict[str, Any], says: str
) -> None:
    assert says in refused(study, **changes)


def test_a_mechanism_of_another_project_is_refused(study: SmallStudy) -> None:
    foreign = make_study().version
    assert "another project" in refused(study, mechanism_version=foreign)


def test_readers_may_not_ask_and_strangers_may_not_know(study: SmallStudy) -> None:
    with pytest.raises(NotPermitted):
        ask(study, user=make_member(study.project, "reader"))
    with pytest.raises(NotFound):
        ask(study, user=make_project().created_by)


def test_stopping_and_trying_again_are_in_the_audit_trail(study: SmallStudy) -> None:
    fit = ask(study)
    assert stop_fit(user=study.user, fit=fit).state == Job.State.STOPPED
    assert retry_fit(user=study.user, fit=fit).state == Job.State.WAITING
    verbs = list(
        AuditEntry.objects.filter(record_kind="fit").order_by("sequence").values_list("verb", flat=True)
    )
    assert verbs == ["asked for", "asked to stop", "asked for again"]


def test_a_reader_may_neither_stop_a_fit_nor_try_it_again(study: SmallStudy) -> None:
    fit, reader = ask(study), make_member(study.project, "reader")
    with pytest.raises(NotPermitted):
        stop_fit(user=reader, fit=fit)
    with pytest.raises(NotPermitted):
        retry_fit(user=reader, fit=fit)
