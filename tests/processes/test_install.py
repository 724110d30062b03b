"""Making the private environment and keeping it at the lock file."""

from __future__ import annotations

import fcntl
import hashlib
import io
import re
import subprocess
import sys
import threading
import zipfile
from pathlib import Path

import pytest

from kinetics_db.config.processes.install import InstallationError, install, main, stamp
from tests.processes.stand_ins import CHECKOUT
from tests.services.processes import wait_until


def make_wheel(folder: Path, version: str) -> str:
    """A package `tiny` with nothing but a version; answers its line for a hashed lock file."""
    path = folder / f"tiny-{version}-py3-none-any.whl"
    info = f"tiny-{version}.dist-info"
    with zipfile.ZipFile(path, "w") as wheel:
        wheel.writestr("tiny.py", f"VERSION = {version!r}\n")
        wheel.writestr(f"{info}/METADATA", f"Metadata-Version: 2.1\nName: tiny\nVersion: {version}\n")
        wheel.writestr(f"{info}/WHEEL", "Wheel-Version: 1.0\nRoot-Is-Purelib: true\nTag: py3-none-any\n")
        wheel.writestr(f"{info}/RECORD", "")
    return f"tiny=={version} --hash=sha256:{hashlib.sha256(path.read_bytes()).hexdigest()}\n"


@pytest.fixture
def checkout(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A checkout whose lock file pins a package that lies in a folder beside it; no network is used."""
    wheels, folder = tmp_path / "wheels", tmp_path / "checkout"
    wheels.mkdir()
    folder.mkdir()
    monkeypatch.setenv("PIP_NO_INDEX", "1")
    monkeypatch.setenv("PIP_FIND_LINKS", str(wheels))
    # What would lead pip astray must not reach it.
    monkeypatch.setenv("PIP_USER", "1")
    monkeypatch.setenv("PIP_TARGET", str(tmp_path / "elsewhere"))
    (folder / "requirements.lock").write_text(make_wheel(wheels, "1.0"))
    (folder / "requirements-dev.lock").write_text(make_wheel(wheels, "1.0"))
    return folder


def installed_version(checkout: Path) -> str:
    python = checkout / ".venv" / "bin" / "python"
    return subprocess.check_output([python, "-c", "import tiny; print(tiny.VERSION)"], text=True).strip()


@pytest.mark.processes
def test_an_environment_is_made_once_and_follows_the_lock_file(checkout: Path, tmp_path: Path) -> None:
    out = io.StringIO()
    assert install("runtime", checkout, out=out)
    assert installed_version(checkout) == "1.0"
    making, installing = out.getvalue().splitlines()
    assert making.startswith(f"Making the private environment {checkout / '.venv'} with Python 3.")
    assert installing.startswith("Installing the 1 packages of requirements.lock")

    out = io.StringIO()
    assert not install("runtime", checkout, out=out)
    assert out.getvalue() == ""

    (checkout / "requirements.lock").write_text(make_wheel(tmp_path / "wheels", "2.0"))
    assert install("runtime", checkout, out=io.StringIO())
    assert installed_version(checkout) == "2.0"
    assert len(list((checkout / ".venv").glob(".runtime-*"))) == 1

    assert install("development", checkout, out=io.StringIO())
    assert stamp(checkout / ".venv", "development", checkout).exists()

    line = (checkout / "requirements.lock").read_text()
    (checkout / "requirements.lock").write_text(re.sub(r"sha256:\w{8}", "sha256:00000000", line))
    (tmp_path / "wheels" / "tiny-1.0-py3-none-any.whl").unlink()
    python = checkout / ".venv" / "bin" / "python"
    subprocess.run([python, "-m", "pip", "uninstall", "-qy", "tiny"], check=True, env={})
    with pytest.raises(InstallationError, match=r"pip could not install requirements\.lock") as caught:
        install("runtime", checkout, out=io.StringIO())
    assert "DO NOT MATCH THE HASHES" in str(caught.value)
    assert not stamp(checkout / ".venv", "runtime", checkout).exists()


def test_an_environment_that_cannot_be_made_is_told_with_the_reason(
    checkout: Path, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    broken = tmp_path / "python"
    broken.write_text("#!/bin/sh\necho 'ensurepip is not available' >&2\nexit 1\n")
    broken.chmod(0o755)
    monkeypatch.setattr(sys, "executable", str(broken))
    with pytest.raises(InstallationError, match="ensurepip is not available"):
        install("runtime", checkout, out=io.StringIO())


def test_a_second_make_says_that_it_waits_for_the_first(
    checkout: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("kinetics_db.config.processes.install._make_environment", lambda *_: False)
    (checkout / ".venv").mkdir()
    stamp(checkout / ".venv", "runtime", checkout).touch()
    out = io.StringIO()
    waiting = threading.Thread(target=install, args=("runtime", checkout), kwargs={"out": out})
    with (checkout / "requirements.lock").open() as held:
        fcntl.flock(held, fcntl.LOCK_EX)
        waiting.start()
        wait_until(out.getvalue, within=10, what="it says something")
        assert out.getvalue() == "Another make is installing here; waiting ...\n"
        waiting.join(0.2)
        assert waiting.is_alive()
    waiting.join(10)
    assert not waiting.is_alive()


def test_what_to_install_has_to_be_said(capsys: pytest.CaptureFixture[str]) -> None:
    assert main([]) == 2
    assert "usage: install.py runtime|development" in capsys.readouterr().err


def pins(name: str) -> set[tuple[str, str]]:
    """Package and version of each entry; a package may have one for old and one for new Pythons."""
    return set(re.findall(r"^([\w.-]+)==(\S+)", (CHECKOUT / name).read_text(), flags=re.MULTILINE))


def test_the_development_lock_holds_the_runtime_lock() -> None:
    runtime, development = pins("requirements.lock"), pins("requirements-dev.lock")
    assert len(runtime) > 10
    assert runtime <= development


@pytest.mark.parametrize("name", ["requirements.lock", "requirements-dev.lock"])
def test_every_pin_of_a_lock_file_carries_hashes(name: str) -> None:
    text = (CHECKOUT / name).read_text()
    entries = re.findall(r"^[\w.-]+.*?(?=^\w|\Z)", text, flags=re.MULTILINE | re.DOTALL)
    assert len(entries) == len(pins(name))
    assert all("--hash=sha256:" in entry for entry in entries)
