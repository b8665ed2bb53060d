"""The lock-step link: counted time, the same bytes, losses and delays where the schedule says so."""

import numpy as np
import pytest

from rtctl.blocks import BIT_ESTOP, BIT_START, MODE_LATCHED, MODE_LIVE, MODE_READY
from rtctl.causes import cause
from rtctl.errors import SetupError
from rtctl.loop.lockstep import LOST_STATE, LOST_TORQUE
from tests.lockstep_runs import Rehearsal, demo


def test_the_same_blocks_give_the_same_rows_bit_for_bit() -> None:
    """Two rehearsals, 2,000 cycles each, motion included."""
    first, second = (Rehearsal(demo()).motion(2.0) for _ in range(2))
    assert first.tobytes() == second.tobytes()


def test_time_is_counted_not_read() -> None:
    """Every cycle is one period after the one before, never late."""
    rows = Rehearsal(demo()).lockstep.advance(50)
    assert np.all(np.diff(rows["now_ns"]) == 1_000_000)
    assert np.array_equal(rows["now_ns"], rows["deadline_ns"])


def test_requests_act_in_the_cycle_they_stand_in() -> None:
    """A start and an e-stop at given cycles."""
    rehearsal = Rehearsal(demo())
    rehearsal.lockstep.advance(500)
    rows = rehearsal.lockstep.advance(600, {10: BIT_START, 400: BIT_ESTOP})
    assert int(rows["mode"][9]) == MODE_READY
    assert int(rows["mode"][10]) == MODE_LIVE
    assert int(rows["mode"][399]) == MODE_LIVE
    assert int(rows["mode"][400]) != MODE_LIVE
    assert int(rows["mode"][-1]) == MODE_LATCHED


def test_lost_states_are_resent_through_and_then_stop_the_arm() -> None:
    """Five in a row pass (the limits file allows five resends), six do not."""
    rehearsal = Rehearsal(demo()).start()
    rows = rehearsal.lockstep.advance(20, dict.fromkeys(range(5, 10), LOST_STATE))
    assert np.all(rows["mode"] == MODE_LIVE)
    rows = rehearsal.lockstep.advance(20, dict.fromkeys(range(5, 11), LOST_STATE))
    assert int(rows["mode"][10]) == MODE_LATCHED
    assert cause(int(rows["first_cause"][10])).name == "state_age"


def test_lost_torques_end_in_the_drivers_time_out() -> None:
    """When no torque arrives any more the driver gives the arm to its rest policy, and the controller stops for it."""
    rehearsal = Rehearsal(demo()).start()
    rows = rehearsal.lockstep.advance(100, dict.fromkeys(range(5, 100), LOST_TORQUE))
    assert int(rows["mode"][-1]) == MODE_LATCHED
    assert cause(int(rows["first_cause"][-1])).name in ("loop_delay", "grant")
    assert int(rehearsal.plant_memory["holder"]) == 0


@pytest.mark.parametrize("delay", [0, 3])
def test_the_delay_by_echo_is_the_delay_of_the_link(delay: int) -> None:
    """A torque delay of 3 cycles shows 3 cycles later in the echo."""
    rehearsal = Rehearsal(demo(), torque_delay=0, state_delay=0)
    rehearsal.lockstep.link["torque_delay"] = delay
    rows = rehearsal.lockstep.advance(100)
    assert int(rows["loop_delay_ns"][-1]) == (1 + delay) * 1_000_000


def test_a_motion_that_is_not_finite_is_an_error_with_a_sentence() -> None:
    """A mass that is not a number in the simulated arm: where, what, and where to look."""
    rehearsal = Rehearsal(demo()).start()
    rehearsal.plant_setup["model"]["mass"][2] = np.nan
    with pytest.raises(SetupError, match="lock-step cycle .*: must run, got status .*masses, gains and limits"):
        rehearsal.lockstep.advance(200)
