"""The command line from outside: real processes, real sockets, real time. Tolerances are wide: this also runs on busy machines."""

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.structure.sources_of import TOP

pytestmark = pytest.mark.slow

RUN = "configs/runs/one_joint.toml"
PATIENCE_S = 90.0  # a first start compiles
DEMO_PATIENCE_S = 240.0


@pytest.fixture
def environment() -> Iterator[dict[str, str]]:
    """A runtime folder of this test alone; short, because a socket's path is."""
    with tempfile.TemporaryDirectory(prefix="rt-", dir="/tmp") as folder:
        yield {**os.environ, "XDG_RUNTIME_DIR": folder}


def rtctl(environment: dict[str, str], *words: str) -> tuple[int, dict[str, Any]]:
    """Run one command with --json: exit code and object."""
    done = subprocess.run(
        [sys.executable, "-m", "rtctl.cli", *words, "--json"],
        cwd=TOP,
        env=environment,
        capture_output=True,
        text=True,
        timeout=DEMO_PATIENCE_S,
    )
    assert "Traceback" not in done.stderr, done.stderr
    return done.returncode, json.loads(done.stdout)


def wait_for_mode(environment: dict[str, str], mode: str) -> dict[str, Any]:
    """The controller's status once it is in a mode."""
    end_s = time.monotonic() + PATIENCE_S
    while time.monotonic() < end_s:
        code, reply = rtctl(environment, "ask", "status")
        if code == 0 and reply["status"]["mode"] == mode:
            return dict(reply["status"])
        time.sleep(0.1)
    raise AssertionError(f"the controller was not in {mode} within {PATIENCE_S} s")


@pytest.fixture
def controller(environment: dict[str, str], tmp_path: Path) -> Iterator["subprocess.Popen[str]"]:
    """`rtctl run --sim` in ready; ended by Ctrl-C when the test has not done so."""
    process = subprocess.Popen(
        [sys.executable, "-m", "rtctl.cli", "run", RUN, "--sim", "--records", str(tmp_path), "--json"],
        cwd=TOP,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        wait_for_mode(environment, "ready")
        yield process
    finally:
        if process.poll() is None:
            process.send_signal(signal.SIGINT)
        process.communicate(timeout=30)


def test_an_operator_starts_swaps_stops_and_resets(environment: dict[str, str], controller: "subprocess.Popen[str]") -> None:
    """Ready waits for a start; a law is swapped between motions; an e-stop latches; a reset starts nothing; Ctrl-C ends the run."""
    assert rtctl(environment, "ask", "law", "pid")[0] == 0
    assert rtctl(environment, "ask", "start")[0] == 0
    assert wait_for_mode(environment, "live")["law"] == "pid"
    assert rtctl(environment, "ask", "stop")[0] == 0
    wait_for_mode(environment, "holding")
    assert rtctl(environment, "ask", "estop")[0] == 0
    wait_for_mode(environment, "latched")
    assert rtctl(environment, "ask", "start")[0] == 1
    assert rtctl(environment, "ask", "why")[1]["why"]["cause"] == "estop"
    assert rtctl(environment, "ask", "reset")[0] == 0
    wait_for_mode(environment, "ready")
    controller.send_signal(signal.SIGINT)
    out, err = controller.communicate(timeout=30)
    outcome = json.loads(out)
    assert (controller.returncode, outcome["ended"], outcome["cause"]) == (0, "interrupted", "none"), err
    code, numbers = rtctl(environment, "compare", outcome["record_path"])
    assert code == 0
    assert numbers["records"][0]["stops"] == ["estop"]


def test_no_controller_and_bad_files_have_their_exit_codes(environment: dict[str, str], tmp_path: Path) -> None:
    """Nothing runs: 3. A file that is not there: 2. A wrong option: 2. Each one object and no traceback."""
    assert rtctl(environment, "ask", "status")[0] == 3
    assert rtctl(environment, "run", str(tmp_path / "none.toml"))[0] == 2
    assert rtctl(environment, "vet", str(tmp_path / "none.toml"))[0] == 2
    assert rtctl(environment, "report", str(tmp_path / "none.rec"))[0] == 2
    assert rtctl(environment, "run", RUN, "--lockstep", "--sim")[0] == 2


def test_demo_does_the_whole_job(environment: dict[str, str], tmp_path: Path) -> None:
    """Four laws in real time, a report, and the rule of the trade: with a fair model, computed torque tracks best."""
    code, data = rtctl(environment, "demo", "--output", str(tmp_path / "laws"))
    assert code == 0, data
    errors = {law: metrics["rms_error_rad"] for law, metrics in data["laws"].items()}
    assert set(errors) == {"feedforward", "pid", "pd_gravity", "computed_torque"}
    assert min(errors, key=lambda law: errors[law]) == "computed_torque"
    assert Path(data["report_path"]).stat().st_size > 10_000
