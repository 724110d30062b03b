from django.apps import AppConfig


class AccountsConfig(AppConfig):
    name = "kinetics_db.accounts"
