"""One run: in lock-step, and live against the simulated arm in another process."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from rtctl.blocks import MODE_LIVE
from rtctl.config.run_file import Hold
from rtctl.errors import ConfigError, SetupError
from rtctl.record.reader import read_record
from rtctl.run import RunOutcome, run_live, run_lockstep
from tests.lockstep_runs import demo

# Stops that a busy test machine causes: such a run is tried again, at most so often.
COMPUTER = ("state_age", "clock_jump", "late_cycles", "grant", "side_thread", "loop_delay")
TRIES = 4


def live_run(folder: Path, **options: object) -> RunOutcome:
    """A live run of the demo, again when the machine stood still."""
    for _ in range(TRIES):
        outcome = run_live(demo(), sim=True, record_folder=folder, **options)  # type: ignore[arg-type]
        if outcome.cause not in COMPUTER:
            break
    return outcome


def test_a_lockstep_run_ends_with_the_motion_and_leaves_a_whole_record(tmp_path: Path) -> None:
    """It starts, follows the motion to its end, holds, and every cycle is in the closed record."""
    outcome = run_lockstep(demo(), law="pid", record_folder=tmp_path)
    assert (outcome.verdict, outcome.ended, outcome.mode, outcome.cause) == ("pass", "motion", "holding", "none")
    record = read_record(outcome.record_path)
    assert record.complete
    assert record.lost_rows == 0
    cycles = record.columns["cycle"]
    assert np.array_equal(cycles, np.arange(len(cycles)))
    assert float(record.columns["t_s"].max()) == pytest.approx(3.8, abs=0.05)  # 1.0 s approach and 2.8 s of sines
    assert record.law_names == ["pid"] or tuple(record.law_names) == ("pid",)


def test_two_lockstep_runs_are_the_same_bit_for_bit(tmp_path: Path) -> None:
    """Every column of every row is identical."""
    first, second = (read_record(run_lockstep(demo(), record_folder=tmp_path).record_path) for _ in range(2))
    for name, column in first.columns.items():
        assert column.tobytes() == second.columns[name].tobytes(), name


def test_a_hold_in_lockstep_needs_a_time(tmp_path: Path) -> None:
    """A motion without an end would never end."""
    run = replace(demo(), reference=Hold(kind="hold"))
    with pytest.raises(ConfigError) as caught:
        run_lockstep(run, record_folder=tmp_path)
    assert str(caught.value) == ("--seconds: must be given for a motion without an end, got nothing. Add e.g. --seconds 5.")
    outcome = run_lockstep(run, record_folder=tmp_path, seconds=0.5)
    assert (outcome.ended, outcome.mode) == ("time", "holding")


def test_a_record_folder_that_is_a_file_is_refused_before_anything_starts(tmp_path: Path) -> None:
    """One message, nothing moved."""
    place = tmp_path / "file"
    place.write_text("")
    with pytest.raises(ConfigError) as caught:
        run_lockstep(demo(), record_folder=place)
    assert str(caught.value) == f"{place}: must be a folder for records, got File exists. Name another one."


@pytest.mark.slow
def test_a_live_run_tracks_as_the_lockstep_run_does(tmp_path: Path) -> None:
    """Real time, two processes: the motion ends without a fault, every cycle is recorded, and the error is that of lock-step.

    Tolerance 25 %: the live loop's torque acts up to one period later, and missed states resend a torque.
    """
    outcome = live_run(tmp_path, start=True)
    assert (outcome.verdict, outcome.ended, outcome.simulated) == ("pass", "motion", True), outcome
    live = read_record(outcome.record_path)
    assert live.complete
    assert live.lost_rows == 0
    assert int(live.columns["cycle"][-1]) + 1 == len(live.columns["cycle"])
    rehearsed = read_record(run_lockstep(demo(), record_folder=tmp_path).record_path)
    errors = [rms_error(record.columns) for record in (live, rehearsed)]
    assert errors[0] == pytest.approx(errors[1], rel=0.25)
    last = live.columns["request"][-3:]
    assert last.tolist() == [2, 2, 2], "release is the last word"


def rms_error(columns: dict[str, np.ndarray]) -> float:
    moving = (columns["mode"] == MODE_LIVE) & (columns["t_s"] > 0.0)
    return float(np.sqrt(np.mean((columns["q_ref"] - columns["q"])[moving] ** 2)))


@pytest.mark.slow
def test_without_start_nothing_moves(tmp_path: Path) -> None:
    """The run becomes ready and stays so: no torque in any row."""
    outcome = live_run(tmp_path, seconds=1.0)
    assert (outcome.started, outcome.ended, outcome.mode) == (False, "time", "ready"), outcome
    record = read_record(outcome.record_path)
    assert not record.columns["tau_out"].any()
    assert not (record.columns["request"] == 1).any()


@pytest.mark.slow
def test_a_rate_this_computer_cannot_hold_is_refused_before_the_start(tmp_path: Path) -> None:
    """With a lateness of 2 us counted as late no computer holds 1 kHz here: one message with the numbers, nothing moved."""
    run = demo()
    limits = run.limits.copy()
    limits["late_ns"], limits["late_max"] = 2000, 1
    with pytest.raises(SetupError) as caught:
        run_live(replace(run, limits=limits), sim=True, start=True, record_folder=tmp_path)
    text = str(caught.value)
    assert text.startswith(f"{run.path}: rate_hz must be a rate that this computer can hold, got 1000 Hz: of ")
    assert text.endswith("Lower rate_hz, end other programs, or permit what was said to be not permitted.")
    (path,) = tmp_path.glob("*.rec")
    assert not read_record(path).columns["tau_out"].any()


@pytest.mark.slow
def test_an_absent_driver_is_a_bounded_wait_and_one_message(tmp_path: Path) -> None:
    """Without a driver the run ends by itself, says what to do, and leaves no ring behind."""
    with pytest.raises(SetupError, match="rtctl sim"):
        run_live(demo(), record_folder=tmp_path)
