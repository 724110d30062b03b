from django.apps import AppConfig


class EvidenceConfig(AppConfig):
    name = "kinetics_db.evidence"
