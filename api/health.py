"""GET /api/v1/health/: whether the parts that a request needs answer."""

from __future__ import annotations

from django.db import Error as DatabaseError
from drf_spectacular.utils import extend_schema
from rest_framework import serializers
from rest_framework.permissions import AllowAny
from rest_framework.request import Request
from rest_framework.response import Response
from rest_framework.views import APIView

from kinetics_db.jobs.selectors import open_count


class HealthAnswer(serializers.Serializer):
    """Whether the parts answer."""

    database = serializers.CharField()
    open_jobs = serializers.IntegerField(help_text="work that waits or is being done")


class Health(APIView):
    """200 when the database answers, 503 when it does not; says how much background work is open."""

    authentication_classes = ()
    permission_classes = (AllowAny,)
    throttle_classes = ()

    @extend_schema(
        operation_id="health",
        tags=["about"],
        summary="Whether the server works",
        responses={200: HealthAnswer, 503: HealthAnswer},
    )
    def get(self, request: Request) -> Response:
        try:
            waiting = open_count()
        except DatabaseError:
            return Response({"database": "does not answer"}, status=503)
        return Response({"database": "answers", "open_jobs": waiting})
