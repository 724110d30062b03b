from django.apps import AppConfig


class DatasetsConfig(AppConfig):
    name = "kinetics_db.datasets"
