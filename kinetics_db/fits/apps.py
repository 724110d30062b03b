from django.apps import AppConfig


class FitsConfig(AppConfig):
    name = "kinetics_db.fits"
