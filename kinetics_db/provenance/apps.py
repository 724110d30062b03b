from django.apps import AppConfig


class ProvenanceConfig(AppConfig):
    name = "kinetics_db.provenance"
