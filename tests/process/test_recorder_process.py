"""Recorder and writer as real processes, killed with signal 9."""

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from rtctl.record.reader import read_record
from rtctl.record.recorder import start_recorder
from rtctl.record.ring import Ring
from tests.synthetic_record import TERMS, InventedArm, append_rows, run_header

pytestmark = pytest.mark.slow
WAIT_S = 20.0  # for things that take well under a second on an idle machine
ROOT = Path(__file__).resolve().parents[2]

WRITER = """
import sys, time
import numpy as np
from rtctl.blocks import ROW
from rtctl.kernels.layout import new_block
from rtctl.record.append import ring_append
from rtctl.record.recorder import start_recorder
from rtctl.record.ring import Ring
from tests.synthetic_record import TERMS, InventedArm, plain_row, run_header
folder = sys.argv[1]
arm = InventedArm()
ring = Ring.create(folder + "/ring", arm, TERMS, 4096)
start_recorder(ring, folder + "/run.record", run_header(ring, arm, TERMS))
row = new_block(ROW)
number = 0
while True:
    plain_row(row, number)
    ring_append(ring.block, row)
    number += 1
    if number == 500:
        print("ready", flush=True)
    if number % 10 == 0:
        time.sleep(0.001)
"""


def wait_for(condition: Callable[[], bool]) -> None:
    """Wait until it holds; fail when it does not within WAIT_S."""
    end_s = time.monotonic() + WAIT_S
    while not condition():
        assert time.monotonic() < end_s, "waited too long"
        time.sleep(0.005)


def test_killing_the_controller_loses_no_row(tmp_path: Path) -> None:
    """Every row that was published when the controller was killed is in a record that the recorder ends by itself."""
    writer = subprocess.Popen(
        [sys.executable, "-c", WRITER, str(tmp_path)],
        cwd=ROOT,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stdout=subprocess.PIPE,
    )
    assert writer.stdout is not None
    try:
        assert writer.stdout.readline() == b"ready\n"
        ring = Ring.open(tmp_path / "ring")
        wait_for(lambda: ring.recorder_status().alive)
    finally:
        writer.kill()
        writer.wait()
        writer.stdout.close()
    published = ring.row_count
    wait_for(lambda: ring.recorder_status().state == "done" and not ring.recorder_status().alive)
    record = read_record(tmp_path / "run.record")
    assert list(record.columns["cycle"]) == list(range(published))
    assert (record.complete, record.lost_rows, record.reason) == (True, 0, "the controller was gone")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["run.record"]


def test_a_killed_recorder_is_noticed_and_replaced_without_loss(tmp_path: Path) -> None:
    """The controller sees the death; a second recorder goes on with the same record and the ring's rows."""
    arm = InventedArm()
    ring = Ring.create(tmp_path / "ring", arm, TERMS, 4096)  # type: ignore[arg-type]  # stands in for an arm
    path, header = tmp_path / "run.record", run_header(ring, arm, TERMS)
    total = 0
    for life in range(3):
        recorder = start_recorder(ring, path, header)
        try:
            wait_for(lambda: ring.recorder_status().alive and ring.recorder_status().state == "running")
            for _ in range(10):
                append_rows(ring, total, 40)
                total += 40
                time.sleep(0.003 * (life + 1))
        finally:
            recorder.kill()
            recorder.wait()
        assert not ring.recorder_status().alive
    append_rows(ring, total, 100)
    total += 100
    ring.close()
    last = start_recorder(ring, path, header)
    assert last.wait(WAIT_S) == 0
    record = read_record(path)
    assert list(record.columns["cycle"]) == list(range(total))
    assert (record.complete, record.lost_rows) == (True, 0)
    assert not ring.path.exists()


def test_ctrl_c_hang_up_and_terminate_do_not_stop_the_recorder(tmp_path: Path) -> None:
    """The recorder outlives the signals that end the controller: it ends when the run does."""
    arm = InventedArm()
    ring = Ring.create(tmp_path / "ring", arm, TERMS, 64)  # type: ignore[arg-type]  # stands in for an arm
    recorder = start_recorder(ring, tmp_path / "run.record", run_header(ring, arm, TERMS))
    try:
        wait_for(lambda: ring.recorder_status().alive)
        for number in (signal.SIGINT, signal.SIGHUP, signal.SIGTERM):
            recorder.send_signal(number)
        beat = ring.recorder_status().beat
        append_rows(ring, 0, 20)
        wait_for(lambda: ring.recorder_status().beat > beat + 1)
        assert os.getsid(recorder.pid) == recorder.pid
        ring.close()
        assert recorder.wait(WAIT_S) == 0
    finally:
        recorder.kill()
        recorder.wait()
    assert read_record(tmp_path / "run.record").row_count == 20


def test_the_recorder_starts_without_the_compiler() -> None:
    """It must be there before the first cycle: importing it loads neither compiler nor sockets."""
    code = (
        "import sys, rtctl.record.recorder; print([m for m in ('numba', 'zmq', 'pydantic', 'rich', 'click') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"
