from django.apps import AppConfig


class PredictionsConfig(AppConfig):
    name = "kinetics_db.predictions"
