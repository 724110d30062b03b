from django.apps import AppConfig


class JobsConfig(AppConfig):
    name = "kinetics_db.jobs"
