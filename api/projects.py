"""Projects and their members."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from django.urls import path, reverse
from rest_framework import serializers
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.schema import operation
from kinetics_db.projects.selectors import (
    members_of,
    project_named,
    project_with_role,
    projects_with_roles,
)
from kinetics_db.projects.services import create_project, give_role, remove_member

if TYPE_CHECKING:
    from kinetics_db.projects.models import Membership, Project

ROLES = ("reader", "contributor", "owner")


class NewProject(serializers.Serializer):
    """What a project needs to begin."""

    slug = serializers.CharField(max_length=60, help_text="short name: small letters, digits, single hyphens")
    name = serializers.CharField(max_length=200)
    description = serializers.CharField(required=False)


class ShownProject(serializers.Serializer):
    """A project, and your role in it."""

    slug = serializers.CharField()
    name = serializers.CharField()
    description = serializers.CharField()
    invented = serializers.BooleanField(help_text="the data are invented, for demonstration")
    verdict_thresholds = serializers.DictField(
        child=serializers.FloatField(), help_text="what differs from the defaults"
    )
    created = serializers.DateTimeField()
    created_by = serializers.CharField()
    role = serializers.ChoiceField(ROLES, help_text="yours, as far as the access token lets you")


class Member(serializers.Serializer):
    """A person and their role."""

    user = serializers.CharField()
    role = serializers.ChoiceField(ROLES)


class NewRole(serializers.Serializer):
    """The role that a person shall have."""

    role = serializers.ChoiceField(ROLES)


class Projects(ApiView):
    """Projects that you may see."""

    @operation(
        "list_projects",
        tag="projects",
        summary="Your projects by short name",
        answers=ShownProject,
        paged=True,
    )
    def get(self, request: Request) -> Response:
        self.params(request, paged=True)
        projects = projects_with_roles(user=request.user)
        return self.listed(
            request,
            projects,
            order=("slug", "id"),
            shown=lambda rows: [_project(p, p.role) for p in rows],
        )

    @operation(
        "create_project",
        tag="projects",
        summary="Begin a project; you become its owner",
        status=201,
        takes=NewProject,
        answers=ShownProject,
        keyed=True,
    )
    def post(self, request: Request) -> Response:
        body = Body.of(request)
        slug, name = body.text("slug", required=True), body.text("name", required=True)
        description = body.text("description")
        body.done()
        project = create_project(user=request.user, slug=slug, name=name, description=description)
        location = reverse("api:project", kwargs={"slug": project.slug})
        return self.created(_project(project, "owner"), location=location)


class OneProject(ApiView):
    """A project."""

    @operation("get_project", tag="projects", summary="A project and your role in it", answers=ShownProject)
    def get(self, request: Request, slug: str) -> Response:
        self.params(request)
        return Response(_project(*project_with_role(user=request.user, slug=slug)))


class Members(ApiView):
    """Who belongs to a project."""

    @operation(
        "list_members", tag="projects", summary="Members of a project by name", answers=Member, paged=True
    )
    def get(self, request: Request, slug: str) -> Response:
        self.params(request, paged=True)
        people = members_of(user=request.user, project=project_named(user=request.user, slug=slug))
        return self.listed(
            request, people, order=("user__username", "id"), shown=lambda rows: [_member(m) for m in rows]
        )


class OneMember(ApiView):
    """A person in a project."""

    @operation(
        "set_member",
        tag="projects",
        summary="Give a person a role in a project",
        description="Owners only; a project keeps at least one owner.",
        takes=NewRole,
        answers=Member,
    )
    def put(self, request: Request, slug: str, username: str) -> Response:
        body = Body.of(request)
        role = body.text("role", required=True)
        body.done()
        project = project_named(user=request.user, slug=slug)
        return Response(_member(give_role(user=request.user, project=project, username=username, role=role)))

    @operation(
        "remove_member",
        tag="projects",
        summary="Take a person's role away",
        description="Owners only; a project keeps at least one owner. What the person entered stays.",
        status=204,
        answers=None,
        errors=(409,),
    )
    def delete(self, request: Request, slug: str, username: str) -> Response:
        project = project_named(user=request.user, slug=slug)
        remove_member(user=request.user, project=project, username=username)
        return Response(status=204)


def _project(project: Project, role: str) -> dict[str, Any]:
    return {
        **{name: getattr(project, name) for name in ("slug", "name", "description", "invented", "created")},
        "verdict_thresholds": project.verdict_thresholds,
        "created_by": project.created_by.get_username(),
        "role": role,
    }


def _member(membership: Membership) -> dict[str, Any]:
    return {"user": membership.user.get_username(), "role": membership.role}


urlpatterns = [
    path("projects/", Projects.as_view(), name="projects"),
    path("projects/<slug:slug>/", OneProject.as_view(), name="project"),
    path("projects/<slug:slug>/members/", Members.as_view(), name="members"),
    path("projects/<slug:slug>/members/<str:username>/", OneMember.as_view(), name="member"),
]
