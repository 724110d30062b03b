# One image for the web server, the workers, the sweeps and the migrations of a lab; see docker-compose.yml.

FROM python:3.13-slim AS dependencies
RUN python -m venv /opt/ratewright
COPY requirements.lock /tmp/requirements.lock
# Wheels only, each with the hash in the lock file: nothing is built, so no compiler is needed.
RUN /opt/ratewright/bin/pip install --no-cache-dir --no-deps --only-binary :all: --require-hashes \
    --requirement /tmp/requirements.lock && /opt/ratewright/bin/pip check

FROM python:3.13-slim
# The same number on every host, so that hosts can share the folder of instrument files.
RUN groupadd --gid 10001 ratewright \
    && useradd --uid 10001 --gid 10001 --no-create-home --home-dir /nonexistent --shell /usr/sbin/nologin ratewright \
    && install --directory --owner ratewright --group ratewright --mode 0700 /srv/ratewright/bytes
COPY --from=dependencies /opt/ratewright /opt/ratewright
WORKDIR /opt/ratewright/code
COPY manage.py LICENSE ./
COPY kinetics_db kinetics_db
COPY api api
COPY workers workers
ENV PATH=/opt/ratewright/bin:$PATH \
    PYTHONPATH=/opt/ratewright/code \
    PYTHONUNBUFFERED=1 \
    PYTHONDONTWRITEBYTECODE=1 \
    DJANGO_SETTINGS_MODULE=kinetics_db.config.settings.lab \
    RATEWRIGHT_BIND=0.0.0.0:8000 \
    RATEWRIGHT_VAR=/tmp/ratewright \
    RATEWRIGHT_BYTES=/srv/ratewright/bytes
# Compiled once here; at run time the file system is read-only.
RUN python -m compileall -q kinetics_db api workers
USER 10001:10001
VOLUME /srv/ratewright/bytes
EXPOSE 8000
HEALTHCHECK --interval=30s --timeout=10s --start-period=60s --retries=3 \
    CMD ["python", "-m", "kinetics_db.config.health", "web"]
# The others: docker-compose.yml says them, with the checks that belong to them.
CMD ["gunicorn", "--config", "python:kinetics_db.config.gunicorn"]
