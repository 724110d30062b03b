"""Addresses of REST under /api/v1/."""

from django.urls import path, re_path

from api.elsewhere import Elsewhere
from api.health import Health

app_name = "api"
urlpatterns = [
    path("health/", Health.as_view(), name="health"),
    re_path(r"", Elsewhere.as_view(), name="elsewhere"),  # last: it takes what no other did
]
