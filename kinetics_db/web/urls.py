"""Addresses of the pages."""

from django.urls import path

from kinetics_db.web.views import account, home, project

app_name = "web"
urlpatterns = [
    path("", home.home, name="home"),
    path("login/", account.Login.as_view(), name="login"),
    path("logout/", account.Logout.as_view(), name="logout"),
    path("projects/<slug:slug>/", project.project, name="project"),
]
