"""A small study and the scripts that ask REST about it; forms with files; counted queries."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from django.core.files.uploadedfile import SimpleUploadedFile
from django.db import connection
from django.test.client import BOUNDARY, MULTIPART_CONTENT, encode_multipart
from django.test.utils import CaptureQueriesContext

from kinetics_db.engine.fitting.problem import Constant
from kinetics_db.fits.models import Fit
from kinetics_db.fits.services import request_fit
from tests.api.conftest import Script, problem
from tests.factories.flow import compute_now
from tests.factories.people import make_member, make_user
from tests.factories.small import SmallStudy, make_study
from tests.factories.tokens import make_token

MOST_QUERIES = 5
_numbers = itertools.count(1)


@dataclass(frozen=True)
class Asked:
    """A study with its owner's script."""

    study: SmallStudy
    script: Script

    @classmethod
    def fresh(cls, **more: Any) -> Asked:
        study = make_study(**more)
        return cls(study, Script(make_token(study.user, scope="write")[1]))

    @property
    def slug(self) -> str:
        return self.study.project.slug

    def fit(self, *, start: float = 0.02, compute: bool = True) -> Fit:
        fit = request_fit(
            user=self.study.user,
            dataset=self.study.dataset,
            mechanism_version=self.study.version,
            constants=[Constant("k", start=start)],
        )
        if compute:
            compute_now(fit)
        return fit

    def reader(self) -> Script:
        return Script(make_token(make_member(self.study.project, "reader"), scope="write")[1])

    def read_only(self) -> Script:
        return Script(make_token(self.study.user, f"reads {next(_numbers)}", scope="read")[1])

    def refuses_others(self, path: str, body: object = None, **more: Any) -> None:
        """A POST that a reader and a reading token may not do, and a stranger not know of."""
        problem(Script(make_token(make_user(), scope="write")[1]).post(path, body, **more), 404)
        problem(self.reader().post(path, body, **more), 403)
        assert "may only read" in problem(self.read_only().post(path, body, **more), 403)["detail"]
        problem(Script().post(path, body, **more), 401)


def hides(path: str, **headers: str) -> None:
    """A GET that tells a stranger nothing."""
    problem(Script(make_token(make_user())[1]).get(path, **headers), 404)
    problem(Script().get(path, **headers), 401)


def form(data: bytes, *, filename: str = "run.csv", **texts: str) -> tuple[bytes, dict[str, Any]]:
    """A form with a file, as `Script.post` takes it: body and keywords."""
    fields: Mapping[str, Any] = {"file": SimpleUploadedFile(filename, data), **texts}
    return encode_multipart(BOUNDARY, fields), {"content_type": MULTIPART_CONTENT}


def fields_of(body: Mapping[str, Any]) -> list[str]:
    """Fields that problem details name."""
    return [found.get("field", "") for found in body["problems"]]


def costs_few_queries(script: Script, path: str, *, most: int = MOST_QUERIES) -> Any:
    """The answer of a GET, which takes no more queries than a list may."""
    script.get(path)  # notes the use of the token, and fills what is kept in memory
    with CaptureQueriesContext(connection) as queries:
        response = script.get(path)
    assert response.status_code == 200, response.content
    assert len(queries) <= most, [q["sql"][:160] for q in queries]
    return response.json()
