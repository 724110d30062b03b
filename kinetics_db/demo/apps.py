from django.apps import AppConfig


class DemoConfig(AppConfig):
    name = "kinetics_db.demo"
