"""Who a request is from: an access token, else the session of the pages (with its CSRF check)."""

from __future__ import annotations

from typing import TYPE_CHECKING

from django.utils import timezone
from rest_framework.authentication import BaseAuthentication
from rest_framework.exceptions import AuthenticationFailed
from rest_framework.request import Request

from kinetics_db.accounts.selectors import token_of_secret
from kinetics_db.accounts.services import note_use

if TYPE_CHECKING:
    from kinetics_db.accounts.models import AccessToken, User

LONGEST_SECRET = 200


class TokenAuthentication(BaseAuthentication):
    """``Authorization: Bearer rw_...``; other schemes are left to whoever stands in front of this server."""

    def authenticate(self, request: Request) -> tuple[User, AccessToken] | None:
        scheme, _, secret = request.headers.get("Authorization", "").strip().partition(" ")
        if scheme.lower() != "bearer":
            return None
        token = token_of_secret(secret.strip()[:LONGEST_SECRET])
        if token is None:
            raise AuthenticationFailed("there is no such access token")
        if token.withdrawn is not None:
            raise AuthenticationFailed(
                f"the access token '{token.name}' was withdrawn on {token.withdrawn:%Y-%m-%d}"
            )
        if token.expires <= timezone.now():
            raise AuthenticationFailed(f"the access token '{token.name}' expired on {token.expires:%Y-%m-%d}")
        if not token.user.is_active:
            raise AuthenticationFailed("the account of this access token is switched off")
        note_use(token)
        token.user.limits = token.limits
        return token.user, token

    def authenticate_header(self, request: Request) -> str:
        return 'Bearer realm="Ratewright"'
