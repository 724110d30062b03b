"""Access tokens of one's own: what they are, making one, withdrawing one."""

from __future__ import annotations

from typing import Any

from django.contrib import messages
from django.http import HttpResponse
from django.shortcuts import redirect, render
from django.urls import path
from django.utils import timezone

from kinetics_db.accounts.selectors import access_tokens_of
from kinetics_db.paging import page_of
from kinetics_db.projects.access import issue_access_token, withdraw_access_token
from kinetics_db.projects.selectors import projects_visible_to
from kinetics_db.web.account_forms import TokenForm, end_of_day
from kinetics_db.web.forms import form_response, problems_shown
from kinetics_db.web.pages import ReadersRequest, action, form_page


@form_page
def tokens(request: ReadersRequest) -> HttpResponse:
    """The person's tokens. A new one is shown in the answer to its form and nowhere else, never again."""
    slugs = dict(projects_visible_to(request.user).values_list("pk", "slug"))
    form = TokenForm(request.POST if request.method == "POST" else None, slugs=list(slugs.values()))
    if form.is_bound and form.is_valid():
        with problems_shown(form):
            given = form.cleaned_data
            token, secret = issue_access_token(
                user=request.user,
                name=given["name"],
                scope=given["scope"],
                expires=end_of_day(given["expires"]),
                project=given["project"],
            )
            empty = TokenForm(slugs=list(slugs.values()))
            context = _listed(request, slugs) | {"form": empty, "made": token, "secret": secret}
            return render(request, "web/account/tokens.html", context)
    return form_response(request, "web/account/tokens.html", _listed(request, slugs) | {"form": form})


def _listed(request: ReadersRequest, slugs: dict[int, str]) -> dict[str, Any]:
    page = page_of(
        access_tokens_of(user=request.user), order=("-created", "-id"), cursor=request.GET.get("cursor")
    )
    now = timezone.now()
    rows = [
        {
            "token": token,
            "place": "all projects"
            if token.project_id is None
            else slugs.get(token.project_id, "a project that you no longer see"),
            "state": "withdrawn" if token.withdrawn else "expired" if token.expires <= now else "good",
        }
        for token in page.items
    ]
    return {"page": page, "rows": rows}


@action
def withdraw_token(request: ReadersRequest, token_id: int) -> HttpResponse:
    """End a token at once."""
    token = withdraw_access_token(user=request.user, token_id=token_id)
    messages.success(request, f"The token '{token.name}' is withdrawn and opens nothing any more.")
    return redirect("web:tokens")


urlpatterns = [
    path("account/tokens/", tokens, name="tokens"),
    path("account/tokens/<int:token_id>/withdraw/", withdraw_token, name="withdraw-token"),
]
