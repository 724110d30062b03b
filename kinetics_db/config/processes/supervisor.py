"""Starts named children, watches them, and stops them in order; nothing is left running.

Children get their own process group (so that Ctrl-C reaches the supervisor alone), write to
``<folder>/<name>.log``, and are stopped in the reverse order of their start.
"""

from __future__ import annotations

import errno
import os
import signal
import threading
import time
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from subprocess import Popen, TimeoutExpired
from types import FrameType
from typing import Self

from .failures import ChildDied, ChildFailed, NotReady
from .guard import Guard, group_is_running, kill_group
from .last_words import describe_status, ending, evidence
from .lock import hold

STDIN = 0
ENDING_SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


@dataclass(frozen=True)
class Child:
    """One program to keep running.

    ``is_ready`` answers whether it can be used now, within ``ready_timeout`` seconds of its start;
    ``grace`` is how long, in seconds, it may take to stop before its whole group is killed;
    ``user`` is a user and group id to run as; ``called`` is what people call it ('The queue (valkey)');
    ``hint`` is advice for the case that it ends by itself.
    """

    name: str
    command: Sequence[str]
    environment: Mapping[str, str] | None = None
    folder: Path | None = None
    is_ready: Callable[[], bool] | None = None
    ready_timeout: float = 30.0
    grace: float = 10.0
    stop_signal: int = signal.SIGTERM
    user: tuple[int, int] | None = None
    hint: str = ""
    called: str = ""

    @property
    def subject(self) -> str:
        """How a sentence about it begins."""
        return self.called or f"The {self.name}"


@dataclass
class _Running:
    child: Child
    process: Popen[bytes]
    log: Path

    def is_ready(self) -> bool:
        return self.child.is_ready is None or self.child.is_ready()


class Supervisor:
    """Owns a set of children from their start to their end.

    Parameters
    ----------
    log_folder : Path
        Where the children's output goes, a file each.
    lock : Path, optional
        A file which only one supervisor at a time can hold; it contains the holder's process id.
    address : str, optional
        Where people reach what runs here (a URL), for those who find the lock taken.
    consequence : str, optional
        How the sentence about a dead child goes on: 'The worker was killed by SIGKILL' + consequence + '.'

    Raises
    ------
    AlreadyRunning
        When another supervisor holds the lock; the message gives its process id.
    """

    def __init__(
        self, log_folder: Path, *, lock: Path | None = None, address: str = "", consequence: str = ""
    ):
        self.log_folder = log_folder
        self.consequence = consequence
        self._has_terminal = os.isatty(STDIN)
        log_folder.mkdir(parents=True, exist_ok=True)
        self._running: list[_Running] = []
        self._lock = hold(lock, address=address) if lock is not None else None
        # The guard shares the lock, so that it is free only when the last child of a killed owner is gone.
        self.guard = Guard(keep_open=() if self._lock is None else (self._lock,))

    def __enter__(self) -> Supervisor:
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()

    def log(self, name: str) -> Path:
        return self.log_folder / f"{name}.log"

    def pid(self, name: str) -> int:
        """Process id of a running child (also the id of its process group)."""
        return self._find(name).process.pid

    def names(self) -> list[str]:
        return [one.child.name for one in self._running]

    def start(self, child: Child) -> int:
        """Start a child and wait until it is ready; answers its process id.

        Raises
        ------
        ChildDied
            When it, or another child, ends meanwhile.
        NotReady
            When it does not answer within its time. It is stopped with the others.
        """
        return self.start_together(child)[0]

    def start_together(self, *children: Child) -> list[int]:
        """Start children at the same time and wait until each is ready; they are stopped in reverse order."""
        begun = time.monotonic()
        started = [self._spawn(child) for child in children]
        waiting = started
        while waiting:
            waiting = [running for running in waiting if not running.is_ready()]
            self.check()
            for running in waiting:
                if time.monotonic() - begun > running.child.ready_timeout:
                    raise self._not_ready(running)
            if waiting:
                time.sleep(0.05)
        self.check()
        return [running.process.pid for running in started]

    def run(self, child: Child, *, timeout: float) -> None:
        """Run a child that should end by itself with status 0 within ``timeout`` seconds."""
        running = self._spawn(child)
        deadline = time.monotonic() + timeout
        while running.process.poll() is None:
            if time.monotonic() > deadline:
                self.stop_child(child.name)
                raise NotReady(
                    f"The step '{child.name}' did not end within {timeout:g} s." + evidence(running.log),
                    name=child.name,
                    log=running.log,
                )
            time.sleep(0.02)
        self._reap(running)
        status = running.process.returncode
        if status != 0:
            raise ChildFailed(
                f"The step '{child.name}' failed ({describe_status(status)})."
                + _explanation(running, status),
                name=child.name,
                log=running.log,
                exit_status=status,
            )

    def check(self) -> None:
        """Raise ChildDied, naming the child and its last words, if any has ended.

        A terminal that was closed meanwhile is an interrupt (KeyboardInterrupt) like Ctrl-C: the hang-up itself
        reaches only the leader of the session, which may be a `make` that just dies of it.
        """
        if self._has_terminal and _terminal_is_closed():
            raise KeyboardInterrupt
        for running in self._running:
            status = running.process.poll()
            if status is not None:
                raise ChildDied(
                    f"{ending(running.child.subject, status)}{self.consequence}."
                    + _explanation(running, status),
                    name=running.child.name,
                    log=running.log,
                    exit_status=status,
                )
        if not self.guard.is_alive():
            raise ChildDied(
                f"The guard (process {self.guard.pid}) that cleans up after this program has died"
                f"{self.consequence}.",
                name="guard",
                log=self.log_folder,
            )

    def wait(self) -> None:
        """Watch the children until interrupted; raises ChildDied when one ends."""
        while True:
            self.check()
            time.sleep(0.2)

    def stop_child(self, name: str, *, kill: bool = False) -> None:
        """Stop one child: its stop signal, then after its grace (or at once) SIGKILL for its group."""
        running = self._find(name)
        process = running.process
        if not kill and process.poll() is None:
            with suppress(ProcessLookupError):
                os.kill(process.pid, running.child.stop_signal)
            with suppress(TimeoutExpired):
                process.wait(running.child.grace)
        self._reap(running)

    def stop(self) -> None:
        """Stop every child, the last started first, and free the lock. May be called twice."""
        with ignoring_interrupts():
            for running in reversed(list(self._running)):
                self.stop_child(running.child.name)
            self.guard.close()
            if self._lock is not None:
                os.close(self._lock)
                self._lock = None

    def _not_ready(self, running: _Running) -> NotReady:
        child = running.child
        return NotReady(
            f"{child.subject} did not become ready within {child.ready_timeout:g} s."
            + evidence(running.log, hint=child.hint),
            name=child.name,
            log=running.log,
        )

    def _spawn(self, child: Child) -> _Running:
        log = self.log(child.name)
        if log.exists():
            log.replace(log.with_suffix(".log.1"))
        with log.open("wb") as output:
            process = self.guard.start(
                child.command,
                output=output,
                environment=child.environment,
                folder=child.folder,
                stop_signal=child.stop_signal,
                user=child.user,
            )
        running = _Running(child, process, log)
        self._running.append(running)
        return running

    def _reap(self, running: _Running) -> None:
        group = running.process.pid
        # Also after a clean end: a grandchild must not outlive its parent.
        kill_group(group)
        running.process.wait()
        deadline = time.monotonic() + 5.0
        while group_is_running(group) and time.monotonic() < deadline:
            time.sleep(0.01)
        self.guard.forget(group)
        self._running.remove(running)

    def _find(self, name: str) -> _Running:
        for running in self._running:
            if running.child.name == name:
                return running
        raise KeyError(name)


class Supervised(ABC):
    """What runs its children under a supervisor of its own: from `start` to `stop`, or for a ``with`` block."""

    _supervisor: Supervisor | None = None

    @abstractmethod
    def start(self) -> None:
        """Start the children; on any failure what was started is stopped again."""

    @abstractmethod
    def stop(self) -> None:
        """Stop the children. May be called twice."""

    @property
    def is_running(self) -> bool:
        """Whether it has been started and not been stopped by `stop`."""
        return self._supervisor is not None

    def __enter__(self) -> Self:
        self.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()

    def _running(self) -> Supervisor:
        if self._supervisor is None:
            raise RuntimeError(f"this {type(self).__name__} is not running")
        return self._supervisor

    def _end(self, *, kill: str | None = None) -> None:
        """Stop all children, the one named by ``kill`` at once, and let go of the supervisor."""
        if self._supervisor is not None:
            if kill is not None:
                self._supervisor.stop_child(kill, kill=True)
            self._supervisor.stop()
            self._supervisor = None


def _explanation(running: _Running, status: int) -> str:
    """A child killed from outside has nothing to say about it; one that gave up has."""
    return f" Log: {running.log}" if status < 0 else evidence(running.log, hint=running.child.hint)


def _terminal_is_closed() -> bool:
    try:
        os.tcgetpgrp(STDIN)
    except OSError as error:
        return error.errno == errno.EIO  # another errno: a terminal, but not the one of this session
    return False


@contextmanager
def interruptible() -> Iterator[None]:
    """Within this block SIGTERM and SIGHUP end the program as Ctrl-C does: by KeyboardInterrupt."""

    def interrupt(number: int, frame: FrameType | None) -> None:
        raise KeyboardInterrupt

    with _handlers(dict.fromkeys(ENDING_SIGNALS, interrupt)):
        yield


@contextmanager
def ignoring_interrupts() -> Iterator[None]:
    """Within this block a second Ctrl-C cannot break off what must be finished."""
    with _handlers(dict.fromkeys(ENDING_SIGNALS, signal.SIG_IGN)):
        yield


@contextmanager
def _handlers(
    wanted: Mapping[signal.Signals, Callable[[int, FrameType | None], None] | signal.Handlers],
) -> Iterator[None]:
    if threading.current_thread() is not threading.main_thread():
        yield  # signals belong to the main thread
        return
    before = {number: signal.signal(number, handler) for number, handler in wanted.items()}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, signal.SIG_DFL if handler is None else handler)
