"""Where requests enter: pages and REST."""

from django.urls import include, path

urlpatterns = [
    path("api/v1/", include("api.urls")),
    path("", include("kinetics_db.web.urls")),
]

# Refused before any view, such as for an unknown host name: a script is told as a script.
handler400 = "api.errors.bad_request"
