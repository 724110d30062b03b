"""Access tokens of the person who asks. Making and withdrawing needs a login: a token hands out no tokens."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

from django.urls import path
from rest_framework import serializers
from rest_framework.request import Request
from rest_framework.response import Response

from api.base import ApiView
from api.bodies import Body
from api.schema import operation
from kinetics_db.accounts.selectors import access_tokens_of
from kinetics_db.projects.access import issue_access_token, withdraw_access_token
from kinetics_db.projects.selectors import projects_visible_to

if TYPE_CHECKING:
    from kinetics_db.accounts.models import AccessToken


class Token(serializers.Serializer):
    """An access token, without its secret."""

    id = serializers.IntegerField()
    name = serializers.CharField()
    begins_with = serializers.CharField(help_text="to recognise the secret by")
    scope = serializers.ChoiceField(["read", "write"])
    project = serializers.CharField(allow_null=True, help_text="the only project that it opens; null for all")
    created = serializers.DateTimeField()
    expires = serializers.DateTimeField()
    last_used = serializers.DateTimeField(allow_null=True)
    withdrawn = serializers.DateTimeField(allow_null=True)


class NewToken(serializers.Serializer):
    """What a token shall be able to do."""

    name = serializers.CharField(max_length=60)
    scope = serializers.ChoiceField(["read", "write"])
    expires = serializers.DateTimeField(help_text="at most 366 days from now")
    project = serializers.CharField(required=False, help_text="short name; absent for all your projects")


class TokenWithSecret(Token):
    """A token with its secret, which is shown this once."""

    secret = serializers.CharField()


class Tokens(ApiView):
    """A person's tokens."""

    writes = False  # no answer is kept for a key: it would hold the secret

    @operation(
        "list_tokens", tag="tokens", summary="Your access tokens, the newest first", answers=Token, paged=True
    )
    def get(self, request: Request) -> Response:
        self.params(request, paged=True)
        tokens = access_tokens_of(user=request.user)
        return self.listed(
            request, tokens, order=("-created", "-id"), shown=lambda rows: _shown(request.user, rows)
        )

    @operation(
        "issue_token",
        tag="tokens",
        summary="Make an access token",
        description="Needs a login; the secret is in the answer and nowhere else, so no Idempotency-Key is taken.",
        status=201,
        takes=NewToken,
        answers=TokenWithSecret,
    )
    def post(self, request: Request) -> Response:
        body = Body.of(request)
        name, scope = body.text("name", required=True), body.text("scope", required=True)
        expires, project = body.time("expires", required=True), body.text("project")
        body.done()
        assert expires is not None
        token, secret = issue_access_token(
            user=request.user, name=name, scope=scope, expires=expires, project=project
        )
        (plain,) = _shown(request.user, [token])
        return Response({**plain, "secret": secret}, status=201, headers={"Cache-Control": "no-store"})


class Withdraw(ApiView):
    """Ends a token."""

    @operation(
        "withdraw_token",
        tag="tokens",
        summary="Withdraw an access token, at once and for good",
        answers=Token,
        keyed=True,
        errors=(409,),
    )
    def post(self, request: Request, token_id: int) -> Response:
        Body.of(request).done()
        (plain,) = _shown(request.user, [withdraw_access_token(user=request.user, token_id=token_id)])
        return Response(plain)


def _shown(user: Any, tokens: Iterable[AccessToken]) -> list[dict[str, Any]]:
    tokens = list(tokens)
    wanted = {token.project_id for token in tokens if token.project_id is not None}
    slugs = dict(projects_visible_to(user).filter(pk__in=wanted).values_list("pk", "slug")) if wanted else {}
    return [
        {
            "id": token.pk,
            "name": token.name,
            "begins_with": token.start,
            "scope": token.scope,
            # A project that is no longer the person's opens to nobody; its name is not theirs to see.
            "project": None
            if token.project_id is None
            else slugs.get(token.project_id, "not yours any more"),
            "created": token.created,
            "expires": token.expires,
            "last_used": token.last_used,
            "withdrawn": token.withdrawn,
        }
        for token in tokens
    ]


urlpatterns = [
    path("tokens/", Tokens.as_view(), name="tokens"),
    path("tokens/<int:token_id>/withdraw/", Withdraw.as_view(), name="withdraw-token"),
]
