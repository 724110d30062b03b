from django.apps import AppConfig


class RunsConfig(AppConfig):
    name = "kinetics_db.runs"
