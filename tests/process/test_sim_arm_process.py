"""The simulated arm as a real process: ready line, signals, endpoints in use, kill -9, ends by itself."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

pytestmark = pytest.mark.slow
ROOT = Path(__file__).resolve().parents[2]
RUN = ROOT / "configs/runs/one_joint.toml"
WAIT_S = 60.0  # a first start compiles; on an idle machine with a cache it takes 1 s
AS_FILE = (sys.executable, str(ROOT / "drivers/sim_arm.py"))
AS_MODULE = (sys.executable, "-m", "drivers.sim_arm")


class Arms:
    """Starts simulated arms with sockets in a folder of their own, and ends what is left."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.environment = {**os.environ, "XDG_RUNTIME_DIR": str(folder)}
        self.started: list[subprocess.Popen[str]] = []

    def start(self, *options: str, command: tuple[str, ...] = AS_MODULE) -> "subprocess.Popen[str]":
        process = subprocess.Popen(
            [*command, str(RUN), *options],
            cwd=ROOT,
            env=self.environment,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            start_new_session=True,
        )
        self.started.append(process)
        return process

    def start_ready(self, *options: str, command: tuple[str, ...] = AS_MODULE) -> tuple["subprocess.Popen[str]", dict[str, Any]]:
        process = self.start("--json", *options, command=command)
        assert process.stdout is not None
        return process, json.loads(process.stdout.readline())

    def close(self) -> None:
        for process in self.started:
            if process.poll() is None:
                process.kill()
            process.communicate()


@pytest.fixture
def arms(tmp_path: Path) -> Iterator[Arms]:
    made = Arms(tmp_path)
    yield made
    made.close()


def ended(process: "subprocess.Popen[str]") -> tuple[int, dict[str, Any]]:
    """Exit code and summary of a process started by `start_ready`."""
    out, _ = process.communicate(timeout=WAIT_S)
    return process.returncode, json.loads(out.splitlines()[-1])


def test_it_ignores_ctrl_c_and_hang_up_and_ends_in_order_on_sigterm(arms):
    """Only SIGTERM ends it; exit code 0, and the summary says it was stopped."""
    process, ready = arms.start_ready()
    assert ready["ready"] is True
    assert ready["pid"] == process.pid
    for number in (signal.SIGINT, signal.SIGHUP, signal.SIGINT):
        process.send_signal(number)
        time.sleep(0.1)
        assert process.poll() is None
    process.send_signal(signal.SIGTERM)
    code, summary = ended(process)
    assert code == 0
    assert summary["ended"] == "stopped"
    assert summary["sent"] > 100


def test_it_runs_as_a_file_of_a_checkout_and_ends_after_its_seconds(arms):
    """`python drivers/sim_arm.py RUN --seconds 0.3`, in words: details, then a line `ready`, then the end."""
    process = arms.start("--seconds", "0.3", command=AS_FILE)
    out, err = process.communicate(timeout=WAIT_S)
    assert process.returncode == 0
    assert err == ""
    assert out.splitlines()[1] == "ready"
    assert out.splitlines()[2].startswith("ended: time over; ")


def test_a_second_driver_on_the_same_endpoints_is_refused_and_the_first_goes_on(arms):
    """Exit code 3, one message, and the states of the first are not disturbed."""
    first, ready = arms.start_ready()
    second = arms.start("--seconds", "0.2")
    out, err = second.communicate(timeout=WAIT_S)
    assert second.returncode == 3
    assert out == ""
    assert err == (
        f"{ready['state_endpoint']}: must be free, got in use by a driver with process number {first.pid}. "
        f"End it first (kill {first.pid}), or choose another endpoint.\n"
    )
    assert first.poll() is None
    first.send_signal(signal.SIGTERM)
    assert ended(first)[0] == 0


def test_a_driver_starts_again_after_kill_9_with_another_session(arms):
    """Socket and lock files of the killed process are no obstacle, and the new session makes old torque void."""
    first, ready = arms.start_ready()
    first.kill()
    first.wait()
    assert Path(ready["state_endpoint"].removeprefix("ipc://")).exists()
    second, again = arms.start_ready("--seconds", "0.2")
    assert again["session"] != ready["session"]
    assert ended(second)[0] == 0


def test_the_seed_fixes_the_session(arms):
    """The same seed, the same session number: for tests that compare bytes."""
    sessions = []
    for _ in range(2):
        process, ready = arms.start_ready("--seconds", "0.05", "--seed", "11")
        sessions.append(ready["session"])
        ended(process)
    assert sessions[0] == sessions[1]


def test_it_ends_with_its_parent_when_asked_to(arms):
    """The parent is killed; the arm notices and ends in order."""
    script = (
        "import subprocess, sys, time\n"
        f"subprocess.Popen([sys.executable, '-m', 'drivers.sim_arm', {str(RUN)!r}, '--json', '--end-with-parent'],"
        " start_new_session=True)\n"
        "time.sleep(60)\n"
    )
    parent = subprocess.Popen(
        [sys.executable, "-c", script], cwd=ROOT, env=arms.environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    arms.started.append(parent)
    assert parent.stdout is not None
    pid = json.loads(parent.stdout.readline())["pid"]
    parent.kill()
    out, _ = parent.communicate(timeout=WAIT_S)  # ends when the arm closes the pipe too
    assert json.loads(out.splitlines()[-1])["ended"] == "stopped"
    with pytest.raises(ProcessLookupError):
        for _ in range(100):
            os.kill(pid, 0)
            time.sleep(0.05)
