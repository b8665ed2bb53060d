"""kill -9 of each process of a running arm: driver, controller, recorder; and an e-stop in motion.

The motion is the demo's; the arm is simulated, in a process of its own. Where the machine itself stops the run first (a stall of
the computer, named as such by its cause), the rehearsal is repeated, at most TRIES times.
"""

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq

from rtctl.blocks import MODE_LATCHED, MODE_LIVE, STATUS_BRAKE
from rtctl.record.reader import Record, read_record
from tests.structure.sources_of import TOP

pytestmark = pytest.mark.slow

RUN = "configs/runs/demo.toml"
PATIENCE_S = 120.0  # a first start compiles
TRIES = 4
HOLDER, STATUS, QD = 6, 12, 14  # places in the state message, drivers/WIRE.md


class Stalled(Exception):
    """The computer stood still before the test did anything; the rehearsal says nothing."""


class Cell:
    """A driver, a controller and its recorder as processes, with a runtime folder of their own."""

    def __init__(self, folder: Path, records: Path) -> None:
        self.environment = {**os.environ, "XDG_RUNTIME_DIR": str(folder)}
        self.folder, self.records = folder, records
        self.processes: list[subprocess.Popen[str]] = []
        self.driver = self.start("-m", "drivers.sim_arm", RUN)
        assert self.driver.stdout is not None
        while self.driver.stdout.readline().strip() != "ready":
            assert self.driver.poll() is None, self.driver.communicate()[1]
        self.controller = self.start("-m", "rtctl.cli", "run", RUN, "--start", "--records", str(records), "--json")

    def start(self, *words: str) -> "subprocess.Popen[str]":
        process = subprocess.Popen(
            [sys.executable, *words], cwd=TOP, env=self.environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        self.processes.append(process)
        return process

    def close(self) -> None:
        for process in self.processes:
            if process.poll() is None:
                process.kill()
            process.communicate()

    def ask(self, *words: str) -> dict[str, Any]:
        done = subprocess.run(
            [sys.executable, "-m", "rtctl.cli", "ask", *words, "--json"],
            cwd=TOP,
            env=self.environment,
            capture_output=True,
            text=True,
            timeout=PATIENCE_S,
        )
        return dict(json.loads(done.stdout))

    def in_motion(self) -> None:
        """Wait until the arm moves, from the states the driver publishes."""
        for state in self.states(PATIENCE_S):
            if max(abs(speed) for speed in state[QD]) > 0.3:
                return
            if self.controller.poll() is not None:
                raise Stalled(self.controller.communicate())
        raise AssertionError("the arm never moved")

    def states(self, seconds: float) -> Iterator[list[Any]]:
        """What the driver says, decoded by the msgpack package."""
        end_s = time.monotonic() + seconds
        with zmq.Context() as context, context.socket(zmq.SUB) as socket:
            socket.setsockopt(zmq.SUBSCRIBE, b"")
            socket.connect(f"ipc://{self.folder}/rtctl/demo-state")
            while time.monotonic() < end_s:
                if socket.poll(100):
                    yield msgpack.unpackb(socket.recv())

    def recorder_pid(self) -> int:
        """The recorder of this controller: its child with that module."""
        for line in Path("/proc").glob("[0-9]*/cmdline"):
            try:
                words = line.read_bytes().split(b"\0")
                parent = int((line.parent / "stat").read_text().rsplit(")", 1)[1].split()[1])
            except OSError:
                continue
            if b"rtctl.record.recorder" in words and parent == self.controller.pid:
                return int(line.parent.name)
        raise AssertionError("no recorder found")

    def outcome(self) -> dict[str, Any]:
        out, err = self.controller.communicate(timeout=PATIENCE_S)
        assert "Traceback" not in err, err
        return dict(json.loads(out))

    def record(self) -> Record:
        (path,) = self.records.glob("*.rec")
        return read_record(path)


@pytest.fixture
def rehearse(tmp_path: Path) -> Iterator[Callable[[Callable[[Cell], None]], None]]:
    """Runs a rehearsal in a fresh cell, again when the computer stood still."""
    cells: list[Cell] = []

    def run(act: Callable[[Cell], None]) -> None:
        for k in range(TRIES):
            folder = Path(tempfile.mkdtemp(prefix="rt-", dir="/tmp"))
            records = tmp_path / str(k)
            cells.append(Cell(folder, records))
            try:
                cells[-1].in_motion()
                act(cells[-1])
            except Stalled:
                cells[-1].close()
                continue
            return
        pytest.fail(f"the computer stood still in {TRIES} of {TRIES} rehearsals")

    yield run
    for cell in cells:
        cell.close()


def test_a_killed_driver_latches_the_controller(rehearse: Callable[..., None]) -> None:
    """Without states the last torque is resent a few times, then released; the cause is the state's age, and nothing restarts."""

    def act(cell: Cell) -> None:
        cell.driver.kill()
        outcome = cell.outcome()
        assert cell.controller.returncode == 1
        if outcome["cause"] != "state_age":
            raise Stalled(outcome["cause"])
        assert (outcome["verdict"], outcome["ended"], outcome["mode"]) == ("refuse", "latched", "latched")
        columns = cell.record().columns
        stopped = int(np.argmax(columns["mode"] == MODE_LATCHED))
        assert columns["mode"][stopped - 1] == MODE_LIVE
        silent = columns["state_new"][: stopped + 1][::-1]
        assert int(np.argmax(silent)) <= 7, "five resends are allowed by the limits file, then the torque goes"
        assert not columns["tau_out"][stopped:].any()
        assert set(columns["request"][stopped:].tolist()) == {2}

    rehearse(act)


def test_a_killed_controller_leaves_the_arm_to_the_drivers_time_out(rehearse: Callable[..., None]) -> None:
    """The driver ends the grant by itself, the arm comes to rest with its brakes closed, and the record has every row."""

    def act(cell: Cell) -> None:
        cell.controller.kill()
        for state in cell.states(5.0):
            if state[HOLDER] == 0 and state[STATUS] & STATUS_BRAKE and max(abs(speed) for speed in state[QD]) < 0.01:
                break
        else:
            raise AssertionError("the arm did not come to rest within 5 s")
        end_s = time.monotonic() + 20.0
        while not cell.record().complete:
            assert time.monotonic() < end_s, "the recorder outlives the controller and closes the record"
            time.sleep(0.05)
        record = cell.record()
        assert record.lost_rows == 0
        cycles = record.columns["cycle"]
        assert np.array_equal(cycles, np.arange(len(cycles)))
        assert record.columns["mode"][-1] == MODE_LIVE

    rehearse(act)


def test_a_killed_recorder_is_noticed_and_does_not_disturb_the_loop(rehearse: Callable[..., None]) -> None:
    """The motion goes on to its end; the status says that the recorder is gone; the record is whole up to its last block."""

    def act(cell: Cell) -> None:
        os.kill(cell.recorder_pid(), signal.SIGKILL)
        end_s = time.monotonic() + 5.0
        noticed = False
        while not noticed and time.monotonic() < end_s and cell.controller.poll() is None:
            reply = cell.ask("status")
            noticed = bool(reply.get("ok")) and not reply["status"]["recorder"]["alive"]
        outcome = cell.outcome()
        if outcome["cause"] != "none":
            raise Stalled(outcome["cause"])
        assert noticed
        assert outcome["ended"] == "motion"
        record = cell.record()
        assert not record.complete
        assert len(record.columns["cycle"]) > 100

    rehearse(act)


def test_an_estop_in_motion_latches_and_a_start_does_nothing(rehearse: Callable[..., None]) -> None:
    """Braked under torque (category 1 of the limits file), latched, released; the run ends negative with that cause."""

    def act(cell: Cell) -> None:
        assert cell.ask("estop")["ok"]
        outcome = cell.outcome()
        if outcome["cause"] != "estop":
            raise Stalled(outcome["cause"])
        assert (cell.controller.returncode, outcome["verdict"], outcome["mode"]) == (1, "refuse", "latched")
        columns = cell.record().columns
        modes = columns["mode"][np.concatenate([[True], np.diff(columns["mode"]) != 0])].tolist()
        assert modes == [0, 1, 2, 3, 5], "off, ready, live, braking, latched"
        braked = columns["qd"][np.argmax(columns["mode"] == MODE_LATCHED)]
        assert np.abs(braked).max() < 0.06, "released at rest, not in motion"

    rehearse(act)
