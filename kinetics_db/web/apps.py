from django.apps import AppConfig


class WebConfig(AppConfig):
    name = "kinetics_db.web"
