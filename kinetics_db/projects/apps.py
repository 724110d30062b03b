from django.apps import AppConfig


class ProjectsConfig(AppConfig):
    name = "kinetics_db.projects"
