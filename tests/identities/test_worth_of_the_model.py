"""What the trade knows about a model in the loop, shown on the demonstration arm in lock-step. Common practice, no source."""

from functools import cache

import numpy as np

from rtctl.blocks import MODE_LIVE
from rtctl.causes import cause
from tests.lockstep_runs import Rehearsal, demo
from tests.sources import source


@cache
def tracked(run: str, law: str) -> tuple[float, float]:
    """RMS tracking error over all joints, rad, and effort (integral of the squared torques), N^2 m^2 s, of one motion."""
    rehearsal = Rehearsal(demo(run), law)
    rows = rehearsal.motion(5.5)
    ended = cause(int(rows["first_cause"][-1])).name
    assert int(rows["mode"][-1]) == MODE_LIVE, ended
    moving = (rows["mode"] == MODE_LIVE) & (rows["t_s"] > 0.0)
    error = (rows["q_ref"] - rows["q"])[moving][:, :6]
    effort = float(np.sum(rows["tau_out"][moving] ** 2) * rehearsal.run.period_s)
    return float(np.sqrt(np.mean(error**2))), effort


@source("common practice")
def test_with_a_fair_model_computed_torque_tracks_better_than_feedforward_alone() -> None:
    """The model without feedback drifts away; with it, the error is at least five times smaller."""
    assert 5.0 * tracked("demo", "computed_torque")[0] < tracked("demo", "feedforward")[0]


@source("common practice")
def test_with_a_fair_model_computed_torque_tracks_better_than_pid() -> None:
    """Masses 5 to 10 % off, another payload, other friction: still at least 1.5 times smaller errors than PID."""
    assert 1.5 * tracked("demo", "computed_torque")[0] < tracked("demo", "pid")[0]


@source("common practice")
def test_with_a_fair_model_computed_torque_needs_less_effort_than_pid() -> None:
    """PID lets errors build up and pays for them in torque."""
    assert tracked("demo", "computed_torque")[1] < tracked("demo", "pid")[1]


@source("common practice")
def test_a_poor_model_makes_computed_torque_worse_than_pid() -> None:
    """With a far wrong description the model hurts: errors at least 1.2 times those of PID on the same arm and motion."""
    assert tracked("poor_model", "computed_torque")[0] > 1.2 * tracked("poor_model", "pid")[0]
