"""Where requests enter: pages and REST."""

from django.urls import include, path

urlpatterns = [
    path("api/v1/", include("api.urls")),
    path("", include("kinetics_db.web.urls")),
]
