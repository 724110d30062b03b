"""What `celery -A workers.celery_app:app worker` starts."""

import os

# Several children with several BLAS threads each fight for the cores; must be set before NumPy loads.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")
os.environ.setdefault("DJANGO_SETTINGS_MODULE", "kinetics_db.config.settings.local")

import django

django.setup()

from django.conf import settings

from kinetics_db.config.celery import configure
from workers.schedule import ROUTES, schedule

app = configure()
app.conf.update(beat_schedule=schedule(every=settings.JOB_SWEEP_SECONDS), task_routes=ROUTES)

import workers.tasks  # noqa: F401  registers the tasks
