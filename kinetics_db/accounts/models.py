"""People who sign in."""

from django.contrib.auth.models import AbstractUser
from django.db import models


class User(AbstractUser):
    """A person. Our own model from the start, since it cannot be swapped in later."""

    time_zone = models.CharField(
        max_length=64, default="UTC", help_text="IANA name; dates are shown in this zone"
    )

    class Meta(AbstractUser.Meta):
        constraints = [
            models.CheckConstraint(condition=~models.Q(username=""), name="user_has_a_username"),
        ]
