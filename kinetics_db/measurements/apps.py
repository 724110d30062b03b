from django.apps import AppConfig


class MeasurementsConfig(AppConfig):
    name = "kinetics_db.measurements"
