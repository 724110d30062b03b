"""Somebody who asks REST for something, as a script does."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from typing import Any

import pytest
from django.core.cache import cache
from django.http import HttpResponse
from django.test import Client

from kinetics_db.accounts.models import User
from kinetics_db.materials.services import enter_compound
from kinetics_db.projects.models import Project
from kinetics_db.projects.services import create_project
from tests.factories.people import make_user
from tests.factories.tokens import make_token


@dataclass
class Script:
    """Sends requests with a token, or with none."""

    secret: str = ""
    client: Client = field(default_factory=Client)

    def ask(
        self,
        method: str,
        path: str,
        body: object = None,
        *,
        content_type: str = "application/json",
        **headers: str,
    ) -> Any:
        """``body`` is sent as JSON unless it is bytes; ``If_Match="..."`` is the header If-Match."""
        sent = {name.replace("_", "-"): value for name, value in headers.items()}
        if self.secret:
            sent.setdefault("Authorization", f"Bearer {self.secret}")
        data = b"" if body is None else body if isinstance(body, bytes) else json.dumps(body).encode()
        return self.client.generic(
            method, f"/api/v1/{path}", data, content_type if data else "", headers=sent
        )

    def get(self, path: str, **headers: str) -> Any:
        return self.ask("GET", path, **headers)

    def post(self, path: str, body: object = None, **headers: Any) -> Any:
        return self.ask("POST", path, body, **headers)


@dataclass
class Lab:
    """A project with its owner, and the owner's script with a writing token."""

    project: Project
    owner: User
    script: Script

    @classmethod
    def fresh(cls) -> Lab:
        owner = make_user("mira")
        project = create_project(user=owner, slug="hydrolysis", name="Hydrolysis of an ester")
        enter_compound(user=owner, project_id=project.pk, name="ester", molar_mass=88.0)
        return cls(project, owner, Script(make_token(owner, scope="write")[1]))

    def script_of(self, user: User, name: str = "other", **limits: str) -> Script:
        return Script(make_token(user, name, **limits)[1])

    def entry(self, code: str = "K01", **more: Any) -> dict[str, Any]:
        return {
            "project": self.project.slug,
            "code": code,
            "charges": [{"compound": "ester", "amount": {"value": 10.0, "unit": "mM", "uncertainty": 0.1}}],
            "temperature": {"value": 40.0, "unit": "degC"},
            **more,
        }

    def logged(self, code: str = "K01", **more: Any) -> dict[str, Any]:
        response = self.script.post("runs/", self.entry(code, **more))
        assert response.status_code == 201, response.content
        return dict(response.json())


@pytest.fixture(autouse=True)
def _no_counted_requests() -> None:
    cache.clear()


@pytest.fixture
def lab(db: None) -> Lab:
    return Lab.fresh()


def problem(response: HttpResponse, status: int) -> dict[str, Any]:
    """The problem details of a refused request."""
    assert response.status_code == status, response.content
    assert response["Content-Type"] == "application/problem+json"
    body = json.loads(response.content)
    assert body["status"] == status and body["title"] and body["detail"]
    return dict(body)
