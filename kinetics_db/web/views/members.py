"""Who belongs to a project: everybody sees it, owners give and take roles."""

from __future__ import annotations

from django import forms
from django.contrib import messages
from django.http import HttpResponse
from django.shortcuts import redirect
from django.urls import path

from kinetics_db.paging import page_of
from kinetics_db.projects.selectors import members_of, project_with_role
from kinetics_db.projects.services import give_role, remove_member
from kinetics_db.web.forms import PlainForm, form_response, problems_shown
from kinetics_db.web.pages import ReadersRequest, form_page

ROLES = (
    ("reader", "reader: sees everything"),
    ("contributor", "contributor: also enters runs, files, mechanisms and asks for fits"),
    ("owner", "owner: also gives roles"),
)


class RoleForm(PlainForm):
    """A person and the role that he or she gets."""

    username = forms.CharField(
        label="Name",
        required=False,
        widget=forms.TextInput(
            attrs={"autocomplete": "off", "spellcheck": "false", "autocapitalize": "none"}
        ),
        help_text="The name that the person logs in with. Whoever runs the server makes accounts.",
    )
    role = forms.CharField(label="Role", required=False, widget=forms.Select(choices=ROLES))


@form_page
def members(request: ReadersRequest, slug: str) -> HttpResponse:
    """The members of a project. ``remove`` in a sent form is the name of who is to lose the role."""
    project, role = project_with_role(user=request.user, slug=slug)
    leaving = request.POST.get("remove") if request.method == "POST" else None
    form = RoleForm(request.POST if request.method == "POST" and leaving is None else None)
    if leaving is not None:
        form = RoleForm({}, auto_id=True)
        form.is_valid()
        with problems_shown(form, names={"username": "remove"}):
            remove_member(user=request.user, project=project, username=leaving)
            messages.success(request, f"{leaving} has no role in this project any more.")
            mine = leaving == request.user.get_username()
            return redirect("web:home") if mine else redirect("web:members", project.slug)
    elif form.is_bound and form.is_valid():
        with problems_shown(form):
            given = give_role(user=request.user, project=project, **form.cleaned_data)
            messages.success(request, f"{given.user.get_username()} is now {given.role} of this project.")
            return redirect("web:members", project.slug)
    people = members_of(user=request.user, project=project)
    page = page_of(people, order=("user__username", "id"), cursor=request.GET.get("cursor"))
    return form_response(
        request,
        "web/project/members.html",
        {
            "project": project,
            "role": role,
            "page": page,
            "form": form,
            "removing": leaving is not None,
            "mine": request.user.pk,
        },
    )


urlpatterns = [path("projects/<slug:slug>/members/", members, name="members")]
