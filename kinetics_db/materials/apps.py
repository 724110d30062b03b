from django.apps import AppConfig


class MaterialsConfig(AppConfig):
    name = "kinetics_db.materials"
