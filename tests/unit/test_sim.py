"""`rtctl sim`: one JSON object at the end, the driver's refusals with their exit codes."""

import json
import os
import sys

import pytest

from rtctl import places
from rtctl.cli import run_command

pytestmark = pytest.mark.slow

READY = {"ready": True, "state_endpoint": "ipc:///r/s", "torque_endpoint": "ipc:///r/t"}
GOOD = f"print({json.dumps(READY)!r}, flush=True); print({json.dumps({'ended': 'time over', 'sent': 5})!r})"


def stand_in(monkeypatch: pytest.MonkeyPatch, script: str) -> None:
    monkeypatch.setattr(places, "driver_command", lambda name: ([sys.executable, "-c", script], dict(os.environ)))


def test_summary_is_the_one_object(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """The ready line goes to standard error, the summary alone to standard output."""
    stand_in(monkeypatch, GOOD)
    assert run_command(["sim", "run.toml", "--json"]) == 0
    captured = capsys.readouterr()
    assert json.loads(captured.out) == {"verdict": "pass", "ended": "time over", "sent": 5}
    assert captured.err.startswith("simulated arm: states on ipc:///r/s, torques on ipc:///r/t.")


@pytest.mark.parametrize("code", [2, 3])
def test_refusals_keep_their_exit_code(code: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """Bad input is 2, an endpoint in use is 3, in the driver's own words."""
    stand_in(monkeypatch, f"import sys; print('because', file=sys.stderr); sys.exit({code})")
    assert run_command(["sim", "run.toml"]) == code
    assert capsys.readouterr().err == "because\n"


def test_a_driver_that_died_is_a_negative_verdict(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    """A driver that ends by a fault or a signal gives exit code 1."""
    stand_in(monkeypatch, "import os, signal; os.kill(os.getpid(), signal.SIGKILL)")
    assert run_command(["sim", "run.toml", "--json"]) == 1
    assert json.loads(capsys.readouterr().out)["verdict"] == "refuse"
