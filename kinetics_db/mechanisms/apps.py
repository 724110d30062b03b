from django.apps import AppConfig


class MechanismsConfig(AppConfig):
    name = "kinetics_db.mechanisms"
