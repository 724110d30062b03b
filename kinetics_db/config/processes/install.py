"""Makes ``.venv`` and installs a hashed lock file into it, unless exactly that has been done before.

Run it as ``python3 kinetics_db/config/processes/install.py runtime`` (or ``development``), after the
preflight. Standard library only: it runs before anything is installed.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
import subprocess
import sys
from pathlib import Path
from typing import TextIO

LOCK_FILES = {"runtime": "requirements.lock", "development": "requirements-dev.lock"}
"""What to install -> the file that pins it. The development lock contains the runtime lock."""

ALSO_INSTALLED = {"runtime": ("runtime",), "development": ("runtime", "development")}


class InstallationError(Exception):
    """pip or venv failed; the message holds its last words."""


def install(what: str, checkout: Path, *, out: TextIO) -> bool:
    """Bring ``.venv`` to the lock file; answers whether there was anything to do.

    Raises
    ------
    InstallationError
        With the last lines of pip's own output and the file that holds them all.
    """
    lock = checkout / LOCK_FILES[what]
    folder = checkout / ".venv"
    with lock.open() as held:
        _wait_for_others(held, out)
        made = _make_environment(folder, out)
        if not made and stamp(folder, what, checkout).exists():
            return False
        _run_pip(folder, lock, out)
        for name in ALSO_INSTALLED[what]:
            for old in folder.glob(f".{name}-*"):
                old.unlink()
            stamp(folder, name, checkout).touch()
    return True


def _wait_for_others(held: TextIO, out: TextIO) -> None:
    """Take the lock: two at once would break each other's half-made environment."""
    try:
        fcntl.flock(held, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        out.write("Another make is installing here; waiting ...\n")
        out.flush()
        fcntl.flock(held, fcntl.LOCK_EX)


def stamp(folder: Path, what: str, checkout: Path) -> Path:
    """The empty file which says that this lock file, as it is now, is installed."""
    digest = hashlib.sha256((checkout / LOCK_FILES[what]).read_bytes()).hexdigest()[:16]
    return folder / f".{what}-{digest}"


def _make_environment(folder: Path, out: TextIO) -> bool:
    python = folder / "bin" / "python"
    wanted = f"{sys.version_info.major}.{sys.version_info.minor}"
    if _version_of(python) == wanted:
        return False
    out.write(f"Making the private environment {folder} with Python {wanted} ...\n")
    out.flush()
    command = [sys.executable, "-m", "venv", "--clear", str(folder)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)  # noqa: S603
    if done.returncode != 0:
        words = (done.stdout + done.stderr).strip().splitlines()[-15:]
        raise InstallationError("The private environment could not be made:\n" + "\n".join(words))
    return True


def _version_of(python: Path) -> str | None:
    """Version of an environment that has pip too, or None if it does not work."""
    code = "import sys, pip; print('%d.%d' % sys.version_info[:2])"
    try:
        done = subprocess.run(  # noqa: S603
            [python, "-c", code], capture_output=True, text=True, check=False, env=_clean_environment()
        )
    except OSError:
        return None
    return done.stdout.strip() if done.returncode == 0 else None


def _clean_environment() -> dict[str, str]:
    """Without what would make pip look, or write, outside the environment."""
    dropped = ("PYTHONPATH", "PYTHONHOME", "PIP_USER", "PIP_TARGET", "PIP_PREFIX")
    return {key: value for key, value in os.environ.items() if key not in dropped} | {"PIP_USER": "0"}


def _run_pip(folder: Path, lock: Path, out: TextIO) -> None:
    pinned = sum("==" in line for line in lock.read_text().splitlines() if line[:1].isalnum())
    out.write(f"Installing the {pinned} packages of {lock.name} (once; takes about a minute) ...\n")
    out.flush()
    command = [str(folder / "bin" / "python"), "-m", "pip", "install", "--require-hashes", "-r", str(lock)]
    command += ["--disable-pip-version-check", "--no-input", "--progress-bar", "off"]
    log = folder / "install.log"
    seen = 0
    with (
        log.open("w") as record,
        subprocess.Popen(  # noqa: S603
            command,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            errors="replace",
            env=_clean_environment(),
        ) as process,
    ):
        for line in process.stdout or ():
            record.write(line)
            if line.startswith(("Collecting ", "Requirement already satisfied: ")):
                seen += 1
                name = line.partition(": ")[2] or line.partition(" ")[2]
                _show(out, f"  {seen} of {pinned}  {name.partition('==')[0].strip()}")
            elif line.startswith("Installing collected packages"):
                _show(out, "  unpacking ...")
    _show(out, "")
    if process.returncode != 0:
        words = log.read_text().strip().splitlines()[-15:]
        raise InstallationError(
            f"pip could not install {lock.name}. Its last words (all of them: {log}):\n"
            + "\n".join(f"    {line}" for line in words)
        )


def _show(out: TextIO, text: str) -> None:
    """Overwrite one line on a terminal; say nothing to a file."""
    if out.isatty():
        out.write(f"\r\x1b[K{text[:78]}")
        out.flush()


def main(arguments: list[str]) -> int:
    if len(arguments) != 1 or arguments[0] not in LOCK_FILES:
        sys.stderr.write("usage: install.py runtime|development\n")
        return 2
    try:
        install(arguments[0], Path(__file__).resolve().parents[3], out=sys.stdout)
    except InstallationError as error:
        sys.stderr.write(f"{error}\n")
        return 1
    except KeyboardInterrupt:
        sys.stderr.write("\nBroken off; the next start goes on.\n")
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
