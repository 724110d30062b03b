"""The web server of a lab: `gunicorn --config python:kinetics_db.config.gunicorn`; read by gunicorn, not by Django."""

from __future__ import annotations

import os
from pathlib import Path

from kinetics_db.config.environment import count

wsgi_app = "kinetics_db.config.wsgi:application"
bind = os.environ.get("RATEWRIGHT_BIND") or "127.0.0.1:8000"

worker_class = "gthread"
workers = count("RATEWRIGHT_WEB_PROCESSES", 2)
threads = count("RATEWRIGHT_WEB_THREADS", 8)
# Each process loads the application after the fork: a pool of connections must not be shared over one.
preload_app = False
# Fresh processes now and then, not all at once, so that no slow leak of any library adds up.
max_requests = 5_000
max_requests_jitter = 1_000

timeout = 60  # s; a process that gives no sign for so long is replaced, a slow request alone is not
graceful_timeout = 20  # s; what requests under way get when the server stops
keepalive = 5  # s; the proxy in front uses its connections again

# Signs of life go through a file: in memory, for a disk may be slow and a container's may be read-only.
worker_tmp_dir = "/dev/shm" if Path("/dev/shm").is_dir() else None  # noqa: S108 - gunicorn makes a private file
control_socket_disable = True
accesslog = "-"
errorlog = "-"
# forwarded_allow_ips stays at this machine: who visits over https, Django learns from X-Forwarded-Proto itself
# (RATEWRIGHT_TLS), and no other header of the proxy is believed.
