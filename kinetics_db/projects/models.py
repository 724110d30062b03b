"""Projects and who belongs to them."""

from django.conf import settings
from django.db import models
from django.db.models import Q


class Project(models.Model):
    """A study with its members and its runs."""

    slug = models.SlugField(max_length=60, unique=True)
    name = models.CharField(max_length=200)
    description = models.TextField(blank=True, default="")
    invented = models.BooleanField(default=False, help_text="the data are invented, for demonstration")
    verdict_thresholds = models.JSONField(
        default=dict, blank=True, help_text="only what differs from the defaults"
    )
    created = models.DateTimeField(auto_now_add=True)
    created_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")

    class Meta:
        constraints = [
            models.CheckConstraint(condition=~Q(name=""), name="project_has_a_name"),
            models.CheckConstraint(condition=~Q(slug=""), name="project_has_a_slug"),
        ]

    def __str__(self) -> str:
        return self.slug


class Membership(models.Model):
    """A person's role in a project."""

    class Role(models.TextChoices):
        READER = "reader"
        CONTRIBUTOR = "contributor"
        OWNER = "owner"

    project = models.ForeignKey(Project, on_delete=models.PROTECT, related_name="memberships")
    user = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="memberships")
    role = models.CharField(max_length=12, choices=Role)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["project", "user"], name="one_role_a_member"),
            models.CheckConstraint(
                condition=Q(role__in=["reader", "contributor", "owner"]), name="role_is_known"
            ),
        ]

    def __str__(self) -> str:
        return f"{self.user_id} in {self.project_id}: {self.role}"
