"""Addresses of REST under /api/v1/."""

from django.urls import path

from api.health import Health

app_name = "api"
urlpatterns = [
    path("health/", Health.as_view(), name="health"),
]
