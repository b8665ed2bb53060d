"""Margins, dwells and counters of the watches; what each leads to is in test_cycle.py and test_fold.py."""

import math

import numpy as np
import pytest

from rtctl.blocks import (
    BIT_STOP,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_OFF,
    WATCH_COUNT,
    WATCH_NAMES,
    WATCH_POSITION,
    WATCH_STATE_AGE,
    WATCH_TRACKING_ERROR,
)
from rtctl.supervisor.watches import margin
from tests.stand import Stand


@pytest.mark.parametrize(
    ("value", "limit", "expected"),
    [
        (0.0, 2.0, 1.0),
        (1.0, 2.0, 0.5),
        (2.0, 2.0, 0.0),
        (9.0, 2.0, 0.0),
        (-1.0, 2.0, 1.0),
        (math.nan, 2.0, 0.0),
        (math.inf, 2.0, 0.0),
        (1.0, 0.0, 0.0),
        (0.0, math.nan, 0.0),
    ],
)
def test_margin_is_one_minus_the_share_of_the_limit_and_zero_for_no_number(value: float, limit: float, expected: float) -> None:
    """Kept in [0, 1]; NaN gives 0, not 1."""
    assert margin(value, limit) == expected


def test_a_quiet_stand_trips_nothing_and_has_margins() -> None:
    """In quiet live nothing trips, and every margin of a watch is above zero and at most one."""
    stand = Stand().to_live()
    assert stand.conditions() == set()
    margins = stand.row["margins"][:WATCH_COUNT]
    assert np.all((margins > 0.0) & (margins <= 1.0)), dict(zip(WATCH_NAMES, margins, strict=True))


def test_the_position_margin_is_the_distance_to_the_nearer_limit() -> None:
    """Half way from the middle to a limit is half the margin; a joint without limits has all of it."""
    stand = Stand().to_live()
    stand.setup["limits"]["q_min"][:2] = (-0.3, -np.inf)
    stand.setup["limits"]["q_max"][:2] = (0.5, np.inf)
    stand.step()
    assert float(stand.row["margins"][WATCH_POSITION]) == pytest.approx(0.5)


def test_a_short_excursion_of_the_error_does_not_stop_the_arm() -> None:
    """Five cycles beyond the error limit are within the dwell of 5 ms, and coming back clears it."""
    stand = Stand().to_live()
    start = float(stand.memory["reference"]["q_start"][0])
    stand.pointers["law_parameters"]["Kp"][:2] = 0.0
    for _ in range(4):
        stand.memory["reference"]["q_start"][0] = start + 0.3
        for _ in range(5):
            stand.step()
        assert float(stand.row["margins"][WATCH_TRACKING_ERROR]) == 0.0
        stand.memory["reference"]["q_start"][0] = start
        stand.step()
    assert stand.mode == MODE_LIVE


def test_the_age_margin_falls_as_states_are_missing() -> None:
    """Each missing state takes a quarter of the margin when three may be missing."""
    stand = Stand().to_live()
    stand.silent = True
    seen = []
    for _ in range(3):
        stand.step()
        seen.append(float(stand.row["margins"][WATCH_STATE_AGE]))
    assert seen == pytest.approx([0.75, 0.5, 0.25])


def test_late_cycles_spread_over_time_are_forgiven() -> None:
    """Ten late cycles in a window of 1000 are allowed: 1 % late for 3 s passes, 5 % does not."""
    stand = Stand().to_live()
    for k in range(3000):
        stand.late_ns = 600_000 if k % 100 == 0 else 0
        stand.step()
    assert stand.mode == MODE_LIVE
    for k in range(3000):
        stand.late_ns = 600_000 if k % 20 == 0 else 0
        stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "late_cycles")


def test_a_skipped_period_counts_as_late() -> None:
    """A cycle that starts on time after skipped periods is late by those periods."""
    stand = Stand().to_live()
    stand.input["skipped"] = 20
    stand.step()
    assert stand.cause == "clock_jump"


def test_a_drive_that_adds_gravity_by_itself_is_refused_unless_allowed() -> None:
    """Gravity would be compensated twice: a fault, until the limits file says it is meant."""
    from rtctl.blocks import STATUS_GRAVITY_ADDED

    stand = Stand()
    stand.driver.status |= STATUS_GRAVITY_ADDED
    for _ in range(60):
        stand.step()
    assert stand.conditions() == {"driver_fault"}
    stand.setup["limits"]["allow_gravity_added"] = 1
    for _ in range(60):
        stand.step()
    assert stand.conditions() == set()


@pytest.mark.parametrize(
    ("joint", "field", "value"), [(0, "q_min", 0.31), (1, "q_min", -0.19), (0, "q_max", 0.29), (1, "q_max", -0.21)]
)
def test_each_joint_has_both_position_limits(joint: int, field: str, value: float) -> None:
    """A limit moved past the joint's position trips, on either side and for every joint."""
    stand = Stand().to_live()
    stand.setup["limits"][field][joint] = value
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_BRAKING, "position")


@pytest.mark.parametrize("speed", [0.03, -0.03])
def test_a_moving_arm_does_not_get_ready(speed: float) -> None:
    """All checks hold but one joint is faster than its still speed of 0.02 rad/s."""
    stand = Stand()
    stand.driver.qd = [0.0, speed]
    for _ in range(100):
        stand.step()
    assert (stand.mode, stand.conditions()) == (MODE_OFF, set())


def test_a_stop_ends_only_after_a_dwell_at_rest_seen_in_new_states() -> None:
    """Ten periods of 1 ms at rest; a zero crossing begins them again, and cycles without a state do not count."""
    stand = Stand().to_live()
    stand.step(BIT_STOP)
    for k in range(9):
        stand.driver.qd = [0.0, 0.1 if k == 4 else 0.0]
        stand.step()
    cycles = 0
    while stand.mode == MODE_BRAKING:
        cycles += 1
        stand.silent = cycles % 2 == 1
        stand.step()
    # Four states at rest after the crossing, so that seven more make it longer than ten periods; every other cycle has none.
    assert (stand.mode, cycles) == (MODE_HOLDING, 2 * 7)
