"""What a person is told about a child that ended: how, and only those last words that explain it."""

from __future__ import annotations

import re
import signal
from collections.abc import Callable, Sequence
from pathlib import Path

LINES_SHOWN = 15
SERIOUS = ("WARNING", "ERROR", "CRITICAL", "FATAL", "PANIC")

_LEVEL = re.compile(
    r"\[?\d{4}-\d\d-\d\d\D.{0,40}?"
    r"\b(DEBUG\d?|INFO|LOG|NOTICE|HINT|DETAIL|STATEMENT|WARNING|ERROR|CRITICAL|FATAL|PANIC)\b"
)
"""A line of Django, Celery, gunicorn or PostgreSQL: a date, and within the next words a level."""

_VALKEY = re.compile(r"\d+:[A-Z] \d\d \w{3} \d{4} [\d:.]+ ([.\-*#]) ")
"""A line of Valkey or Redis, whose level is a mark: '#' is a warning."""

_UNCAUGHT = re.compile(
    r"Traceback \(most recent call last\)|Fatal |[\w.]*(?:Error|Exception)\b|cannot start "
)
"""Words of a program that ends without its logger."""


def describe_status(status: int) -> str:
    """Say in words how a process ended: 'exit status 3' or 'killed by SIGKILL'."""
    if status >= 0:
        return f"exit status {status}"
    try:
        return f"killed by {signal.Signals(-status).name}"
    except ValueError:
        return f"killed by signal {-status}"


def ending(called: str, status: int) -> str:
    """'The worker ended with exit status 3' or 'The worker was killed by SIGKILL'."""
    return f"{called} {'ended with' if status >= 0 else 'was'} {describe_status(status)}"


def evidence(log: Path, *, hint: str = "") -> str:
    """Advice, where the log is, and its last lines that matter; begins with a space.

    Lines below a warning are left out where the log states levels.
    """
    try:
        lines = log.read_text(errors="replace").rstrip().splitlines()
    except OSError:
        lines = []
    advice = f" {hint}" if hint else ""
    if not lines:
        return f"{advice} It wrote nothing to {log}"
    shown = serious(lines)[-LINES_SHOWN:]
    if not shown:
        return f"{advice} Log: {log}"
    return f"{advice} The last lines of {log}:\n" + "\n".join(f"    {line}" for line in shown)


def serious(lines: Sequence[str]) -> list[str]:
    """Lines from a warning on upwards, each with the lines that continue it; all where none has a level."""
    levels = [_level(line) for line in lines]
    if not any(levels):
        return list(lines)
    kept, keeping = [], False
    for line, level in zip(lines, levels, strict=True):
        if level:
            keeping = level in SERIOUS
        elif _UNCAUGHT.match(line):
            keeping = True
        if keeping:
            kept.append(line)
    return kept


def _level(line: str) -> str:
    if found := _LEVEL.match(line):
        return found[1]
    if found := _VALKEY.match(line):
        return "WARNING" if found[1] == "#" else "INFO"
    return ""


def only_first_sentence(colour: Callable[[str], str]) -> Callable[[str], str]:
    """A colour for the first sentence alone.

    The codes of a colour that spans several lines get parted by what `make` writes in between.
    """

    def paint(text: str) -> str:
        found = re.search(r"[.!](?=\s)|(?=\n)", text)
        end = found.end() if found else len(text)
        return colour(text[:end]) + text[end:]

    return paint
