from django.apps import AppConfig


class ExchangeConfig(AppConfig):
    name = "kinetics_db.exchange"
