from django.apps import AppConfig


class ProvenanceConfig(AppConfig):
    name = "kinetics_db.provenance"

    def ready(self) -> None:
        from kinetics_db.accounts.signals import account_written
        from kinetics_db.provenance.writing import audit_account

        account_written.connect(audit_account, dispatch_uid="audit of accounts")
