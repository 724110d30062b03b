"""Starting, watching and stopping children."""

from __future__ import annotations

import os
import pty
import signal
import subprocess
import sys
import threading
import time
from functools import partial
from pathlib import Path

import pytest

from kinetics_db.config.processes.failures import AlreadyRunning, ChildDied, ChildFailed, NotReady
from kinetics_db.config.processes.guard import is_running
from kinetics_db.config.processes.local import says
from kinetics_db.config.processes.supervisor import (
    Child,
    Supervised,
    Supervisor,
    interruptible,
)
from tests.processes.stand_ins import CHECKOUT, HAS_A_GRANDCHILD, IGNORES_SIGTERM, RUNS_FOR_LONG, child
from tests.services.processes import children_of, wait_until

pytestmark = pytest.mark.filterwarnings("error")


def number_in(log: Path) -> int:
    """The number that a stand-in has printed."""
    wait_until(lambda: log.read_text().strip(), within=10, what="the stand-in prints a number")
    return int(log.read_text().split()[0])


def test_a_child_is_started_with_its_output_in_a_file_of_its_name(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        log = supervisor.log("sleeper")
        pid = supervisor.start(child("sleeper", RUNS_FOR_LONG, is_ready=lambda: says(log, "running")))
        assert log == tmp_path / "sleeper.log"
        assert is_running(pid)
        supervisor.check()
    assert not is_running(pid)


def test_the_output_of_the_start_before_is_kept_beside_the_new_one(tmp_path: Path) -> None:
    for words in ("first", "second"):
        with Supervisor(tmp_path) as supervisor:
            supervisor.run(child("speaker", f"print({words!r})"), timeout=10)
    assert (tmp_path / "speaker.log").read_text() == "second\n"
    assert (tmp_path / "speaker.log.1").read_text() == "first\n"


def test_a_dead_child_is_named_with_its_exit_status_and_its_last_words(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        supervisor.start(child("sweeper", RUNS_FOR_LONG))
        with pytest.raises(ChildDied) as caught:
            supervisor.start(child("worker", "print('no queue'); raise SystemExit(3)"))
            supervisor.wait()
    first_line, *words = str(caught.value).splitlines()
    assert first_line == f"The worker ended with exit status 3. The last lines of {tmp_path / 'worker.log'}:"
    assert words == ["    no queue"]
    assert (caught.value.name, caught.value.exit_status) == ("worker", 3)


def test_a_child_killed_from_outside_is_reported_in_one_line_with_the_consequence_and_no_advice(
    tmp_path: Path,
) -> None:
    with Supervisor(tmp_path, consequence="; the rest goes on") as supervisor:
        log = supervisor.log("valkey")
        server = child(
            "valkey",
            RUNS_FOR_LONG,
            called="The queue",
            hint="Remove it.",
            is_ready=lambda: says(log, "running"),
        )
        os.kill(supervisor.start(server), signal.SIGKILL)
        with pytest.raises(ChildDied) as caught:
            supervisor.wait()
    assert str(caught.value) == f"The queue was killed by SIGKILL; the rest goes on. Log: {log}"


def test_advice_stands_with_a_child_that_ended_by_itself(tmp_path: Path) -> None:
    message = r"^The valkey ended with exit status 1\. Remove it\. The last lines"
    with Supervisor(tmp_path) as supervisor, pytest.raises(ChildDied, match=message):
        supervisor.start(child("valkey", "print('broken'); raise SystemExit(1)", hint="Remove it."))
        supervisor.wait()


def test_a_child_that_is_silent_when_it_dies_is_said_to_have_written_nothing(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor, pytest.raises(ChildDied, match="It wrote nothing to"):
        supervisor.start(child("web", "raise SystemExit(1)"))
        supervisor.wait()


def test_a_program_that_does_not_exist_is_reported_by_name(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor, pytest.raises(ChildDied, match="cannot start /nowhere/server"):
        supervisor.start(Child(name="valkey", command=["/nowhere/server"]))
        supervisor.wait()


def test_a_child_that_does_not_become_ready_in_time_is_reported_and_stopped(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        slow = child("web", RUNS_FOR_LONG, is_ready=lambda: False, ready_timeout=0.3)
        with pytest.raises(NotReady, match=r"The web did not become ready within 0\.3 s"):
            supervisor.start(slow)
        pid = supervisor.pid("web")
    assert not is_running(pid)


def test_the_death_of_another_child_ends_the_wait_for_a_slow_one(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        supervisor.start(child("valkey", "import time; time.sleep(0.3)"))
        begun = time.monotonic()
        with pytest.raises(ChildDied, match="The valkey ended with exit status 0"):
            supervisor.start(child("web", RUNS_FOR_LONG, is_ready=lambda: False, ready_timeout=60))
        assert time.monotonic() - begun < 10


def test_children_started_together_do_not_wait_for_one_another(tmp_path: Path) -> None:
    slow = "import time; time.sleep(0.7); print('ready', flush=True); time.sleep(300)"
    with Supervisor(tmp_path) as supervisor:
        begun = time.monotonic()
        names = ("sweeper", "worker", "web", "one", "two", "three")
        pids = supervisor.start_together(
            *(child(name, slow, is_ready=partial(says, supervisor.log(name), "ready")) for name in names)
        )
        assert all(says(supervisor.log(name), "ready") for name in names)
        assert time.monotonic() - begun < 0.7 * len(names)
        assert pids == [supervisor.pid(name) for name in names]


def test_children_are_stopped_in_the_reverse_order_of_their_start(tmp_path: Path) -> None:
    order = tmp_path / "order"
    code = (
        "import signal, sys, time\n"
        "def end(*_):\n"
        "    open({order!r}, 'a').write({name!r} + ' ')\n"
        "    sys.exit()\n"
        "signal.signal(signal.SIGTERM, end)\n"
        "print('ready', flush=True)\n"
        "time.sleep(300)\n"
    )
    with Supervisor(tmp_path) as supervisor:
        for name in ("valkey", "sweeper", "worker", "web"):
            log = supervisor.log(name)
            supervisor.start(
                child(
                    name,
                    code.format(order=str(order), name=name),
                    is_ready=lambda log=log: says(log, "ready"),
                )
            )
    assert order.read_text().split() == ["web", "worker", "sweeper", "valkey"]


def test_a_child_deaf_to_sigterm_is_killed_after_its_grace(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        log = supervisor.log("deaf")
        pid = supervisor.start(child("deaf", IGNORES_SIGTERM, is_ready=lambda: says(log, "deaf"), grace=0.5))
        begun = time.monotonic()
    assert not is_running(pid)
    assert 0.5 <= time.monotonic() - begun < 5


@pytest.mark.parametrize("kill", [False, True], ids=["stopped", "killed"])
def test_a_grandchild_does_not_outlive_a_child(tmp_path: Path, kill: bool) -> None:
    with Supervisor(tmp_path) as supervisor:
        supervisor.start(child("worker", HAS_A_GRANDCHILD))
        grandchild = number_in(supervisor.log("worker"))
        assert is_running(grandchild)
        supervisor.stop_child("worker", kill=kill)
        assert not is_running(grandchild)


def test_a_step_that_fails_is_reported_with_its_last_words(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor, pytest.raises(ChildFailed) as caught:
        supervisor.run(child("migrate", "print('no such table'); raise SystemExit(1)"), timeout=10)
    assert str(caught.value).startswith("The step 'migrate' failed (exit status 1).")
    assert str(caught.value).endswith("    no such table")


def test_a_step_that_takes_too_long_is_stopped(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        with pytest.raises(NotReady, match=r"The step 'migrate' did not end within 0\.3 s"):
            supervisor.run(child("migrate", RUNS_FOR_LONG), timeout=0.3)
        assert supervisor.names() == []


def test_a_second_supervisor_of_the_same_folder_is_refused_with_process_and_address_of_the_first(
    tmp_path: Path,
) -> None:
    lock = tmp_path / "supervisor.lock"
    message = f"already runs from {tmp_path} at http://127.0.0.1:8765/ as process {os.getpid()}; use that one"
    refused = pytest.raises(AlreadyRunning, match=message)
    with Supervisor(tmp_path / "log", lock=lock, address="http://127.0.0.1:8765/"), refused:
        Supervisor(tmp_path / "log", lock=lock)
    with Supervisor(tmp_path / "log", lock=lock):
        pass


def test_children_do_not_get_the_interrupt_of_the_terminal(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        pid = supervisor.start(child("worker", RUNS_FOR_LONG))
        assert os.getpgid(pid) == pid != os.getpgrp()


def test_a_child_can_write_to_a_closed_pipe_and_end_as_programs_do(tmp_path: Path) -> None:
    # Python ignores SIGPIPE, and an ignored signal would stay ignored in the children.
    with Supervisor(tmp_path) as supervisor:
        supervisor.run(
            Child(name="shell", command=["/bin/sh", "-c", "(yes; echo $? >&2) | head -1"]), timeout=10
        )
        assert sorted(supervisor.log("shell").read_text().split()) == [str(128 + signal.SIGPIPE), "y"]


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_every_way_to_end_a_program_is_an_interrupt_inside_the_block(number: signal.Signals) -> None:
    before = signal.getsignal(number)
    with pytest.raises(KeyboardInterrupt), interruptible():
        os.kill(os.getpid(), number)
        time.sleep(5)
    assert signal.getsignal(number) is before


def test_a_supervisor_in_a_thread_leaves_the_signals_alone(tmp_path: Path) -> None:
    problems: list[BaseException] = []

    def run() -> None:
        try:
            with interruptible(), Supervisor(tmp_path) as supervisor:
                supervisor.start(child("worker", RUNS_FOR_LONG))
        except BaseException as error:
            problems.append(error)

    thread = threading.Thread(target=run)
    thread.start()
    thread.join()
    assert problems == []


SUPERVISOR_TO_BE_KILLED = """
import sys
from pathlib import Path
from kinetics_db.config.processes.supervisor import Supervisor, interruptible
from tests.processes.stand_ins import HAS_A_GRANDCHILD, IGNORES_SIGTERM, child

folder = Path(sys.argv[1])
supervisor = Supervisor(folder / "log", lock=folder / "supervisor.lock")
try:
    with interruptible():
        programs = {"valkey": HAS_A_GRANDCHILD, "worker": HAS_A_GRANDCHILD, "web": IGNORES_SIGTERM}
        for name, code in programs.items():
            supervisor.start(child(name, code, grace=1.0))
        print(supervisor.guard.pid, *(supervisor.pid(name) for name in supervisor.names()), flush=True)
        supervisor.wait()
except KeyboardInterrupt:
    supervisor.stop()
"""


def start_another_supervisor(folder: Path) -> tuple[subprocess.Popen[str], list[int]]:
    """A supervisor in its own process, and the process ids of all that it started."""
    process = subprocess.Popen(
        [sys.executable, "-c", SUPERVISOR_TO_BE_KILLED, str(folder)],
        cwd=CHECKOUT,
        env={**os.environ, "PYTHONPATH": str(CHECKOUT)},
        stdout=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    assert process.stdout is not None
    pids = [int(word) for word in process.stdout.readline().split()]
    pids += [number_in(folder / "log" / f"{name}.log") for name in ("valkey", "worker")]
    assert len(pids) == 6
    assert all(is_running(pid) for pid in pids)
    return process, pids


@pytest.mark.processes
@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGTERM, signal.SIGINT, signal.SIGHUP])
def test_nothing_is_left_running_however_the_supervisor_ends(tmp_path: Path, number: signal.Signals) -> None:
    process, pids = start_another_supervisor(tmp_path)
    with process:
        os.kill(process.pid, number)
        process.wait(20)
        wait_until(
            lambda: not any(is_running(pid) for pid in pids),
            within=20,
            what="all children and the guard have ended",
        )


LEADER_OF_A_SESSION = """
import os, subprocess, sys
# Like make: waits for its command, and dies of the hang-up without telling it.
subprocess.run([sys.executable, "-c", *sys.argv[1:]], check=False)
"""


@pytest.mark.processes
def test_nothing_is_left_running_when_the_terminal_is_closed_and_only_the_leader_hears_of_it(
    tmp_path: Path,
) -> None:
    leader, terminal = pty.fork()
    if leader == 0:
        os.chdir(CHECKOUT)
        code = SUPERVISOR_TO_BE_KILLED
        arguments = [sys.executable, "-c", LEADER_OF_A_SESSION, code, str(tmp_path)]
        os.execve(sys.executable, arguments, {**os.environ, "PYTHONPATH": str(CHECKOUT)})
    words = b""
    while b"\n" not in words:
        words += os.read(terminal, 1000)
    pids = [int(word) for word in words.split()]
    pids += [number_in(tmp_path / "log" / f"{name}.log") for name in ("valkey", "worker")]
    (supervisor,) = children_of(leader)
    assert all(is_running(pid) for pid in pids)
    time.sleep(0.5)
    assert is_running(supervisor), "an open terminal is no reason to stop"
    os.close(terminal)
    wait_until(
        lambda: not any(is_running(pid) for pid in [*pids, supervisor]),
        within=20,
        what="the supervisor, its children and the guard have ended",
    )
    os.waitpid(leader, 0)


@pytest.mark.processes
def test_a_start_right_after_a_killed_one_waits_until_the_old_children_are_gone(tmp_path: Path) -> None:
    process, pids = start_another_supervisor(tmp_path)
    with process:
        process.kill()
        process.wait(20)
        with Supervisor(tmp_path / "log", lock=tmp_path / "supervisor.lock"):
            assert not any(is_running(pid) for pid in pids[1:])


def test_the_death_of_the_guard_is_noticed(tmp_path: Path) -> None:
    with Supervisor(tmp_path) as supervisor:
        log = supervisor.log("worker")
        pid = supervisor.start(child("worker", RUNS_FOR_LONG, is_ready=lambda: says(log, "running")))
        os.kill(supervisor.guard.pid, signal.SIGKILL)
        with pytest.raises(ChildDied, match="The guard"):
            supervisor.wait()
    assert not is_running(pid)


class Sleepers(Supervised):
    """Two children that run for long."""

    def __init__(self, folder: Path):
        self.folder = folder

    def start(self) -> None:
        self._supervisor = Supervisor(self.folder)
        self._supervisor.start_together(child("first", RUNS_FOR_LONG), child("second", RUNS_FOR_LONG))

    def stop(self) -> None:
        self._end()

    def kill(self, name: str) -> None:
        self._end(kill=name)

    def pid(self, name: str) -> int:
        return self._running().pid(name)


def test_what_is_supervised_runs_until_its_block_ends_in_whatever_way(tmp_path: Path) -> None:
    sleepers = Sleepers(tmp_path)
    assert not sleepers.is_running
    with pytest.raises(ZeroDivisionError), sleepers as entered:
        assert entered is sleepers and sleepers.is_running
        pids = [sleepers.pid("first"), sleepers.pid("second")]
        assert all(is_running(pid) for pid in pids)
        _ = 1 / 0
    assert not sleepers.is_running
    assert not any(is_running(pid) for pid in pids)
    sleepers.stop()


def test_killing_one_child_of_what_is_supervised_ends_the_others_too(tmp_path: Path) -> None:
    with Sleepers(tmp_path) as sleepers:
        pids = [sleepers.pid("first"), sleepers.pid("second")]
        sleepers.kill("first")
        assert not sleepers.is_running
        assert not any(is_running(pid) for pid in pids)


def test_asking_for_a_process_of_what_is_not_running_says_so(tmp_path: Path) -> None:
    with pytest.raises(RuntimeError, match="this Sleepers is not running"):
        Sleepers(tmp_path).pid("first")
