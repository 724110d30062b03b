"""People and projects."""

from __future__ import annotations

import itertools

from kinetics_db.accounts.models import User
from kinetics_db.projects.models import Project
from kinetics_db.projects.services import create_project, set_member

_numbers = itertools.count(1)


def make_user(name: str = "") -> User:
    return User.objects.create_user(username=name or f"person{next(_numbers)}", password="a long password 1")


def make_project(user: User | None = None, slug: str = "") -> Project:
    user = user or make_user()
    return create_project(user=user, slug=slug or f"project-{next(_numbers)}", name="A study")


def make_member(project: Project, role: str, name: str = "") -> User:
    member = make_user(name)
    set_member(user=project.created_by, project=project, member=member, role=role)
    return member
