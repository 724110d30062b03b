"""Reads about predictions."""

from __future__ import annotations

from kinetics_db.accounts.models import User
from kinetics_db.errors import NotFound
from kinetics_db.predictions.models import Prediction
from kinetics_db.projects.selectors import NOT_VISIBLE, require_reader


def prediction_by_id(*, user: User, prediction_id: int) -> Prediction:
    """One prediction that the person may see."""
    found = Prediction.objects.select_related("result__fit").filter(pk=prediction_id).first()
    if found is None:
        raise NotFound(NOT_VISIBLE)
    require_reader(user=user, project_id=found.result.fit.project_id)
    return found
