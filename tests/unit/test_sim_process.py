"""The simulated arm as a child: waited for with a bound, its refusals passed on in its own words, ended in every case."""

import os
import sys
import time

import pytest

from rtctl import sim_process
from rtctl.errors import ConfigError, SetupError
from rtctl.sim_process import SimulatedArm

pytestmark = pytest.mark.slow

READY_THEN_WAIT = "import signal, sys, time; print('bound', flush=True); print('ready', flush=True); time.sleep(60)"
DEAF = "import signal, time; signal.signal(signal.SIGTERM, signal.SIG_IGN); print('ready', flush=True); time.sleep(60)"


def driver(monkeypatch: pytest.MonkeyPatch, script: str) -> SimulatedArm:
    """A child that runs `script` in place of the driver."""
    monkeypatch.setattr(sim_process, "driver_command", lambda name: ([sys.executable, "-c", script], dict(os.environ)))
    return SimulatedArm("run.toml")


def test_entering_waits_for_the_ready_line_and_leaving_ends_the_process(monkeypatch: pytest.MonkeyPatch) -> None:
    """Between the two the process lives, in a session of its own."""
    with driver(monkeypatch, READY_THEN_WAIT) as arm:
        assert arm._process is not None and arm._process.poll() is None
        assert os.getsid(arm._process.pid) == arm._process.pid
    assert arm._process.poll() is not None


@pytest.mark.parametrize(("code", "kind"), [(2, ConfigError), (3, SetupError)])
def test_a_driver_that_refuses_is_quoted(monkeypatch: pytest.MonkeyPatch, code: int, kind: type[Exception]) -> None:
    """What the driver said becomes the error, with the exit code it had."""
    script = f"import sys; print('endpoint: must be free', file=sys.stderr); sys.exit({code})"
    with pytest.raises(kind) as caught, driver(monkeypatch, script):
        raise AssertionError("not reached")
    assert str(caught.value) == "endpoint: must be free"


def test_a_silent_driver_is_given_up(monkeypatch: pytest.MonkeyPatch) -> None:
    """The wait is bounded, and the process does not stay behind."""
    monkeypatch.setattr(sim_process, "READY_WAIT_S", 0.3)
    arm = driver(monkeypatch, "import time; time.sleep(60)")
    with pytest.raises(SetupError) as caught, arm:
        raise AssertionError("not reached")
    assert str(caught.value) == "simulated arm: must be ready within 0 s, got nothing. Try again."
    assert arm._process is not None and arm._process.poll() is not None


def test_a_deaf_driver_is_ended_by_force(monkeypatch: pytest.MonkeyPatch) -> None:
    """A process that ignores the polite request is killed after a bounded wait."""
    monkeypatch.setattr(sim_process, "END_WAIT_S", 0.2)
    began = time.monotonic()
    with driver(monkeypatch, DEAF) as arm:
        pass
    assert arm._process is not None and arm._process.returncode == -9
    assert time.monotonic() - began < 10.0  # bound, not a measurement: an interpreter start and END_WAIT_S
