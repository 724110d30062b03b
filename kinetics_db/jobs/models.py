"""Background work: one row a job, one row an attempt at it."""

from django.conf import settings
from django.db import models
from django.db.models import F, Q


class Job(models.Model):
    """A piece of background work asked for.

    The row is the truth and a queue message only a doorbell. A worker claims the row with a conditional
    UPDATE; `attempts` then is its fencing token: whoever holds an older number can no longer write.
    """

    class State(models.TextChoices):
        WAITING = "waiting"
        RUNNING = "running"
        DONE = "done"
        STOPPED = "stopped"
        FAILED = "failed"  # the work itself says it cannot be done
        CRASHED = "crashed"  # three attempts ended without a word

    OPEN = (State.WAITING, State.RUNNING)

    kind = models.CharField(max_length=40)
    subject_id = models.BigIntegerField(help_text="id of the request that this job computes")
    state = models.CharField(max_length=10, choices=State, default=State.WAITING)
    attempts = models.PositiveSmallIntegerField(
        default=0, help_text="attempts begun; the current fencing token"
    )
    attempts_allowed = models.PositiveSmallIntegerField(default=3)
    lease_until = models.DateTimeField(null=True, blank=True)
    progress = models.FloatField(default=0.0)
    message = models.CharField(max_length=500, blank=True, default="")
    stop_requested = models.BooleanField(default=False)
    requested_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    created = models.DateTimeField(auto_now_add=True)
    rings = models.PositiveSmallIntegerField(default=0, help_text="messages sent since it last began to wait")
    ring_after = models.DateTimeField(
        null=True, blank=True, help_text="when the sweep sends the next message"
    )
    finished = models.DateTimeField(null=True, blank=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["kind", "subject_id"], name="one_job_a_request"),
            models.CheckConstraint(
                condition=Q(progress__gte=0.0, progress__lte=1.0), name="job_progress_is_a_share"
            ),
            models.CheckConstraint(
                condition=~Q(state="running") | Q(lease_until__isnull=False), name="running_job_has_a_lease"
            ),
            models.CheckConstraint(
                condition=Q(state__in=["waiting", "running"], finished__isnull=True)
                | Q(state__in=["done", "stopped", "failed", "crashed"], finished__isnull=False),
                name="job_finished_when_it_ended",
            ),
        ]
        indexes = [
            models.Index(fields=["state", "lease_until"], name="job_sweep"),
            models.Index(F("created").desc(), F("id").desc(), name="job_newest"),
        ]

    def __str__(self) -> str:
        return f"{self.kind} {self.subject_id}: {self.state}"


class Attempt(models.Model):
    """One try of a worker at a job."""

    class Outcome(models.TextChoices):
        RUNNING = "running"
        DONE = "done"
        STOPPED = "stopped"
        FAILED = "failed"
        LOST = "lost"  # its lease ran out

    job = models.ForeignKey(Job, on_delete=models.PROTECT, related_name="attempt_set")
    number = models.PositiveSmallIntegerField()
    worker = models.CharField(max_length=200)
    started = models.DateTimeField()
    heartbeat = models.DateTimeField()
    ended = models.DateTimeField(null=True, blank=True)
    outcome = models.CharField(max_length=10, choices=Outcome, default=Outcome.RUNNING)
    detail = models.TextField(blank=True, default="")

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["job", "number"], name="attempt_numbers_are_unique"),
            models.CheckConstraint(condition=Q(number__gte=1), name="attempts_count_from_one"),
        ]

    def __str__(self) -> str:
        return f"attempt {self.number} at job {self.job_id}: {self.outcome}"
