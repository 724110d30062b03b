"""Every address below /api/v1/ where nothing is: problem details instead of a page for people."""

from __future__ import annotations

from typing import Any

from drf_spectacular.utils import extend_schema
from rest_framework.permissions import AllowAny
from rest_framework.request import Request
from rest_framework.views import APIView

from kinetics_db.errors import NotFound


@extend_schema(exclude=True)
class Elsewhere(APIView):
    """404 to every method."""

    authentication_classes = ()
    permission_classes = (AllowAny,)
    throttle_classes = ()

    def initial(self, request: Request, *args: Any, **kwargs: Any) -> None:
        """Refuse before the method, or the form of the answer, matters."""
        slash = "" if request.path.endswith("/") else "; addresses end with a slash"
        raise NotFound(f"There is nothing at {request.path:.200}{slash}.")
