from django.apps import AppConfig


class ProvenanceConfig(AppConfig):
    name = "kinetics_db.provenance"

    def ready(self) -> None:
        from django.contrib.auth import get_user_model
        from django.db.models.signals import post_save

        from kinetics_db.provenance.writing import audit_account

        post_save.connect(audit_account, sender=get_user_model(), dispatch_uid="audit of accounts")
