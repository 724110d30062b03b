"""What is told of a child that ended."""

from __future__ import annotations

from pathlib import Path

import pytest

from kinetics_db.config.processes.last_words import (
    LINES_SHOWN,
    describe_status,
    ending,
    evidence,
    only_first_sentence,
    serious,
)

DJANGO = """\
2026-12-01 09:00:00,123 INFO kinetics_db.jobs: swept
2026-12-01 09:00:01,123 ERROR kinetics_db.jobs: no database
  File "jobs.py", line 3
2026-12-01 09:00:02,123 INFO kinetics_db.jobs: swept""".splitlines()

CELERY = """\

 -------------- local@host v5 (name)
[tasks]
  . jobs.run
[2026-12-01 09:00:00,123: INFO/MainProcess] local@host ready.
[2026-12-01 09:00:01,123: CRITICAL/MainProcess] Unrecoverable error""".splitlines()

GUNICORN = """\
[2026-12-01 09:00:00 +0000] [31646] [INFO] Starting
[2026-12-01 09:00:01 +0000] [31646] [ERROR] Connection in use: ('127.0.0.1', 8765)""".splitlines()

VALKEY = """\
14523:M 01 Dec 2026 09:00:00.123 * Ready to accept connections unix
14523:M 01 Dec 2026 09:00:01.123 # Bad file format reading the append only file""".splitlines()

POSTGRESQL = """\
2026-12-01 09:00:00.123 UTC [7] LOG:  database system is ready to accept connections
2026-12-01 09:00:01.123 UTC [7] FATAL:  could not write to the log""".splitlines()


@pytest.mark.parametrize(
    ("lines", "kept"),
    [
        (DJANGO, DJANGO[1:3]),
        (CELERY, CELERY[-1:]),
        (GUNICORN, GUNICORN[1:]),
        (VALKEY, VALKEY[1:]),
        (POSTGRESQL, POSTGRESQL[1:]),
    ],
    ids=["django", "celery", "gunicorn", "valkey", "postgresql"],
)
def test_only_warnings_and_worse_are_shown_with_what_continues_them(
    lines: list[str], kept: list[str]
) -> None:
    assert serious(lines) == kept


def test_an_exception_that_passed_the_logger_by_is_shown() -> None:
    uncaught = ["Traceback (most recent call last):", '  File "jobs.py", line 3', "MemoryError"]
    assert serious([*DJANGO[-1:], *uncaught]) == uncaught
    assert serious([*DJANGO[-1:], "CommandError: no"]) == ["CommandError: no"]


def test_where_no_line_states_a_level_all_are_shown() -> None:
    lines = ["no such table", "INFO is no level without a date"]
    assert serious(lines) == lines


def test_a_log_without_a_warning_is_only_named(tmp_path: Path) -> None:
    log = tmp_path / "sweeper.log"
    log.write_text(DJANGO[0])
    assert evidence(log) == f" Log: {log}"


def test_of_a_long_log_the_end_is_shown(tmp_path: Path) -> None:
    log = tmp_path / "migrate.log"
    log.write_text("".join(f"line {i}\n" for i in range(100)))
    first, *lines = evidence(log, hint="Try again.").splitlines()
    assert first == f" Try again. The last lines of {log}:"
    assert lines == [f"    line {i}" for i in range(100 - LINES_SHOWN, 100)]


@pytest.mark.parametrize(
    ("status", "words"),
    [(0, "exit status 0"), (3, "exit status 3"), (-9, "killed by SIGKILL"), (-11, "killed by SIGSEGV")],
)
def test_an_exit_status_is_said_in_words(status: int, words: str) -> None:
    assert describe_status(status) == words


@pytest.mark.parametrize(
    ("status", "sentence"),
    [(3, "The worker ended with exit status 3"), (-9, "The worker was killed by SIGKILL")],
)
def test_the_end_of_a_child_is_a_sentence(status: int, sentence: str) -> None:
    assert ending("The worker", status) == sentence


@pytest.mark.parametrize(
    ("text", "painted"),
    [
        (
            "Error: it died; all stopped. Log: /var/a.log\n",
            "<Error: it died; all stopped.> Log: /var/a.log\n",
        ),
        ("no full stop\n    more\n", "<no full stop>\n    more\n"),
        ("neither", "<neither>"),
        ("port 1.5 is none.\n", "<port 1.5 is none.>\n"),
    ],
)
def test_a_colour_ends_with_the_first_sentence_before_the_line_does(text: str, painted: str) -> None:
    assert only_first_sentence(lambda words: f"<{words}>")(text) == painted
