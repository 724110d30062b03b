"""People who sign in."""

from __future__ import annotations

from django.conf import settings
from django.contrib.auth.models import AbstractUser
from django.db import models
from django.db.models import F, Q

from kinetics_db.accounts.limits import SCOPES, Limits


class User(AbstractUser):
    """A person. Our own model from the start, since it cannot be swapped in later."""

    time_zone = models.CharField(
        max_length=64, default="UTC", help_text="IANA name; dates are shown in this zone"
    )

    limits: Limits | None = None
    """Set for a request that came with an access token; no column."""

    class Meta(AbstractUser.Meta):
        constraints = [
            models.CheckConstraint(condition=~models.Q(username=""), name="user_has_a_username"),
        ]


class AccessToken(models.Model):
    """Lets a script act as a person, within limits and until a date. Only the secret's digest is kept."""

    user = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="access_tokens")
    name = models.CharField(max_length=60)
    digest = models.CharField(max_length=64, unique=True, help_text="SHA-256 of the secret")
    start = models.CharField(max_length=12, help_text="first characters of the secret, to recognise it by")
    scope = models.CharField(max_length=5, choices=[(scope, scope) for scope in SCOPES])
    project_id = models.BigIntegerField(
        null=True, help_text="the only project it opens; no foreign key: projects stand above"
    )
    created = models.DateTimeField()
    expires = models.DateTimeField()
    last_used = models.DateTimeField(null=True, help_text="to the minute")
    withdrawn = models.DateTimeField(null=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(
                fields=["user", "name"], condition=Q(withdrawn__isnull=True), name="token_name_once_a_person"
            ),
            models.CheckConstraint(condition=~Q(name=""), name="token_has_a_name"),
            models.CheckConstraint(condition=Q(scope__in=SCOPES), name="token_scope_is_known"),
            models.CheckConstraint(condition=Q(expires__gt=F("created")), name="token_expires_later"),
        ]

    def __str__(self) -> str:
        return f"{self.name} ({self.start}...)"

    @property
    def limits(self) -> Limits:
        """As the rules of projects read them."""
        return Limits("write" if self.scope == "write" else "read", self.project_id, self.name)


class IdempotencyKey(models.Model):
    """What a writing request was answered, so that the same request sent again is not done twice.

    Written in the transaction of the write itself: a crash leaves neither or both.
    """

    user = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    key = models.CharField(max_length=255)
    request = models.CharField(max_length=300, help_text="method and path, for the message")
    request_digest = models.CharField(max_length=64, help_text="SHA-256 of method, address, limits and body")
    status = models.PositiveSmallIntegerField(default=0)
    headers = models.JSONField(default=dict)
    body = models.BinaryField(default=bytes)
    created = models.DateTimeField(db_index=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["user", "key"], name="idempotency_key_once_a_person"),
            models.CheckConstraint(condition=~Q(key=""), name="idempotency_key_has_characters"),
        ]

    def __str__(self) -> str:
        return f"{self.key}: {self.request}"
