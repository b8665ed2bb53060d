"""One cycle at a time: modes, torque and causes, with every watch broken once."""

import math
from collections.abc import Callable

import numpy as np
import pytest

from rtctl.blocks import (
    BIT_ESTOP,
    BIT_RESET,
    BIT_START,
    BIT_STOP,
    BIT_STOP_RELEASE,
    LIMITER_RAMP,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_OFF,
    MODE_READY,
    REQUEST_ASK,
    REQUEST_DRIVE,
    REQUEST_RELEASE,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_STOP_CHAIN_CLOSED,
    STOP_NOW,
)
from tests.stand import SESSION, Stand

# Gravity torque of the stand's arm at (q1, q2), from the moments of its weights about each joint.
G = 9.80665
SUM_ROUNDING = 1e-12


def stand_gravity(q1: float, q2: float) -> np.ndarray:
    """Planar two-link arm, angles from the horizontal: closed form (Siciliano et al., Robotics, 2009, sec. 7.3.2)."""
    outer = 0.12 * G * math.cos(q1 + q2)
    return np.array([(0.3 + 1.0 * 0.3) * G * math.cos(q1) + outer, outer])


def test_ready_needs_the_grant_the_echo_and_the_dwell() -> None:
    """From off, ready comes only after the grant, the first echo and 20 ms of checks; no torque flows before a start."""
    stand = Stand()
    for k in range(60):
        row = stand.step()
        assert int(row["request"]) == REQUEST_ASK
        assert not row["tau_out"].any()
        if k < 20:
            assert stand.mode == MODE_OFF
    assert stand.mode == MODE_READY


def test_start_begins_with_full_holding_torque() -> None:
    """The first torque is the gravity torque at the measured pose, and the ramp only blends the difference to the law."""
    stand = Stand()
    stand.until(MODE_READY)
    row = stand.step(BIT_START)
    assert (stand.mode, int(row["request"])) == (MODE_LIVE, REQUEST_DRIVE)
    assert row["tau_out"][:2] == pytest.approx(stand_gravity(*stand.driver.q), rel=SUM_ROUNDING)
    stand.pointers["law_parameters"]["Kd"][:2] = (9.0, 1.0)  # the law wants this constant torque
    shares = []
    hold = stand_gravity(*stand.driver.q)
    for _ in range(14):
        row = stand.step()
        shares.append(float((row["tau_ramp"][0] - hold[0]) / (9.0 - hold[0])))
    assert shares == sorted(shares)
    assert shares[0] <= 0.1 + SUM_ROUNDING
    assert shares[-1] == pytest.approx(1.0)
    assert int(row["limiters"][0]) & LIMITER_RAMP == 0


def test_a_start_without_ready_does_nothing() -> None:
    """Asked in off, a start is not remembered for later."""
    stand = Stand()
    stand.step(BIT_START)
    for _ in range(60):
        stand.step()
    assert stand.mode == MODE_READY


def test_the_law_torque_is_the_ordered_sum_of_its_terms() -> None:
    """tau_law equals term 1 plus term 2, to the last bit, and tau_out equals it when no limiter acts."""
    stand = Stand().to_live()
    stand.pointers["law_parameters"]["Kd"][:2] = (0.1, 0.2)
    stand.driver.q = [0.3 - 0.0123, -0.2 + 0.0077]
    for _ in range(30):
        row = stand.step()
    for i in range(2):
        assert float(row["tau_law"][i]) == float(row["terms"][0, i]) + float(row["terms"][1, i])
        assert float(row["tau_out"][i]) == float(row["tau_law"][i])


def test_a_commanded_stop_brakes_holds_and_starts_again_without_reset() -> None:
    """Category 2 ends in holding with torque on, no cause is kept, and a start goes on from the torque in force."""
    stand = Stand().to_live()
    stand.driver.qd = [0.5, 0.0]
    row = stand.step(BIT_STOP)
    assert (stand.mode, int(row["request"])) == (MODE_BRAKING, REQUEST_DRIVE)
    stand.driver.qd = [0.0, 0.0]
    stand.until(MODE_HOLDING)
    assert stand.cause == "none"
    for _ in range(30):
        row = stand.step()
    held = row["tau_out"][:2].copy()
    assert held == pytest.approx(stand_gravity(*stand.driver.q), rel=SUM_ROUNDING)
    row = stand.step(BIT_START)
    assert stand.mode == MODE_LIVE
    assert row["tau_out"][:2].tolist() == held.tolist()


def test_a_commanded_release_ends_in_ready_and_gives_the_grant_back() -> None:
    """Category 1 on request: brake, then release; the next motion needs a new grant."""
    stand = Stand().to_live()
    before = stand.driver.grant
    stand.step(BIT_STOP_RELEASE)
    stand.until(MODE_READY)
    assert int(stand.row["request"]) == REQUEST_RELEASE
    assert stand.driver.holder == 0
    stand.until(MODE_OFF)
    stand.until(MODE_READY)
    assert stand.driver.grant == before + 1
    assert stand.cause == "none"


def test_braking_opposes_the_speed_on_top_of_gravity() -> None:
    """Braking torque is gravity minus damping times speed."""
    stand = Stand().to_live()
    stand.driver.qd = [0.5, -0.3]
    stand.step(BIT_STOP)
    for _ in range(20):
        row = stand.step()
    wanted = stand_gravity(*stand.driver.q) - 5.0 * np.array([0.5, -0.3])
    assert row["tau_out"][:2] == pytest.approx(wanted, rel=SUM_ROUNDING)


def test_holding_pulls_back_with_a_bounded_spring() -> None:
    """In holding, a push meets 100 N m/rad until the spring reaches its bound of 6 N m."""
    stand = Stand().to_live()
    stand.step(BIT_STOP)
    stand.until(MODE_HOLDING)
    for k in range(1, 31):
        stand.driver.q = [0.3 + 0.005 * k, -0.2]  # slow enough not to be taken for a glitch
        row = stand.step()
        extra = row["tau_out"][:2] - stand_gravity(*stand.driver.q)
        assert extra == pytest.approx([-min(0.5 * k, 6.0), 0.0], abs=1e-9)


def test_estop_latches_from_every_mode_and_only_a_reset_leaves_it() -> None:
    """After an e-stop no torque leaves, a start does nothing, a reset leads to off, and motion needs a separate start."""
    for reach in (lambda s: s.step(), lambda s: s.until(MODE_READY), lambda s: s.to_live()):
        stand = Stand()
        reach(stand)
        stand.step(BIT_ESTOP)
        stand.until(MODE_LATCHED)
        assert stand.cause == "estop"
        for _ in range(50):
            row = stand.step(BIT_START)
            assert (stand.mode, int(row["request"])) == (MODE_LATCHED, REQUEST_RELEASE)
            assert not row["tau_out"].any()
        stand.step(BIT_RESET)
        assert stand.mode == MODE_OFF
        assert stand.cause == "none"
        stand.until(MODE_READY)
        for _ in range(50):
            stand.step()
        assert stand.mode == MODE_READY


def test_reset_and_start_together_do_not_start() -> None:
    """Both bits in one cycle: only the reset acts."""
    stand = Stand().to_live()
    stand.step(BIT_ESTOP)
    stand.until(MODE_LATCHED)
    for _ in range(20):
        stand.step()
    stand.step(BIT_RESET | BIT_START)
    assert stand.mode == MODE_OFF
    for _ in range(60):
        stand.step()
    assert stand.mode == MODE_READY


def test_reset_is_refused_while_the_cause_is_present() -> None:
    """With the stop chain still open, a reset stays latched; closed again, it works."""
    stand = Stand().to_live()
    stand.driver.status &= ~STATUS_STOP_CHAIN_CLOSED
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "stop_chain")
    for _ in range(20):
        stand.step(BIT_RESET)
    assert stand.mode == MODE_LATCHED
    stand.driver.status |= STATUS_STOP_CHAIN_CLOSED
    stand.step()
    stand.step(BIT_RESET)
    assert stand.mode == MODE_OFF


def test_estop_category_0_releases_at_once() -> None:
    """With category 0 in the limits file the e-stop releases in the same cycle, even at speed."""
    stand = Stand().to_live()
    stand.setup["limits"]["estop_stop"] = STOP_NOW
    stand.driver.qd = [0.5, 0.0]
    row = stand.step(BIT_ESTOP)
    assert (stand.mode, int(row["request"])) == (MODE_LATCHED, REQUEST_RELEASE)


def test_without_a_state_the_last_torque_is_resent_for_at_most_k_cycles() -> None:
    """Three cycles answer the same state with the same torque, the fourth releases: the law is not called on old data."""
    stand = Stand().to_live()
    row = stand.step()
    last, answered = row["tau_out"][:2].copy(), int(row["answered_sequence"])
    stand.silent = True
    for _ in range(3):
        row = stand.step()
        assert (int(row["request"]), int(row["answered_sequence"])) == (REQUEST_DRIVE, answered)
        assert row["tau_out"][:2].tolist() == last.tolist()
    row = stand.step()
    assert (stand.mode, int(row["request"]), stand.cause) == (MODE_LATCHED, REQUEST_RELEASE, "state_age")


def break_identity(stand: Stand) -> None:
    stand.driver.arm_key += 1


def break_version(stand: Stand) -> None:
    stand.driver.version += 1


def nan_position(stand: Stand) -> None:
    stand.driver.q[0] = math.nan


def infinite_speed(stand: Stand) -> None:
    stand.driver.qd[1] = math.inf


def drive_fault(stand: Stand) -> None:
    stand.driver.status |= STATUS_FAULT


def drive_disabled(stand: Stand) -> None:
    stand.driver.status &= ~STATUS_ENABLED


def brake_closes(stand: Stand) -> None:
    stand.driver.status |= STATUS_BRAKE


def chain_opens(stand: Stand) -> None:
    stand.driver.status &= ~STATUS_STOP_CHAIN_CLOSED


def grant_lost(stand: Stand) -> None:
    stand.driver.holder = 0


def grant_replaced(stand: Stand) -> None:
    stand.driver.grant += 1


def driver_restarted(stand: Stand) -> None:
    stand.driver.session += 1
    stand.driver.sequence = 0
    stand.driver.holder = 0


def suspended(stand: Stand) -> None:
    stand.late_ns = 50_000_000


def boot_clock_steps(stand: Stand) -> None:
    stand.input["boot_offset_ns"] += 1_000_000_000


def outside_position(stand: Stand) -> None:
    stand.setup["limits"]["q_max"][0] = 0.29


def glitch(stand: Stand) -> None:
    stand.driver.q[0] += 0.05  # 1 ms at 3 rad/s times 3 allows 0.009


def too_fast(stand: Stand) -> None:
    stand.driver.qd[0] = 3.1


def law_dies(stand: Stand) -> None:
    stand.pointers["law_parameters"]["extra"][0] = 0


def law_says_nan(stand: Stand) -> None:
    stand.pointers["law_parameters"]["Kd"][0] = math.nan


def far_from_reference(stand: Stand) -> None:
    stand.memory["reference"]["q_start"][0] += 0.3
    stand.pointers["law_parameters"]["Kp"][:2] = 0.0


def greedy(stand: Stand) -> None:
    stand.pointers["law_parameters"]["Kd"][0] = 45.0


def side_thread_silent(stand: Stand) -> None:
    stand.beat = -1_000_000
    step = stand.step

    def frozen(requests: int = 0) -> np.void:
        stand.beat = -1_000_000
        return step(requests)

    stand.step = frozen  # type: ignore[method-assign]


def deaf_driver(stand: Stand) -> None:
    stand.driver.hears = False


def always_late(stand: Stand) -> None:
    stand.late_ns = 600_000


BROKEN: list[tuple[Callable[[Stand], None], str, int, int]] = [
    # fault, cause, cycles until torque has stopped being the law's, mode then
    (break_identity, "state_invalid", 1, MODE_LATCHED),
    (break_version, "state_invalid", 1, MODE_LATCHED),
    (nan_position, "state_invalid", 1, MODE_LATCHED),
    (infinite_speed, "state_invalid", 1, MODE_LATCHED),
    (drive_fault, "driver_fault", 1, MODE_LATCHED),
    (drive_disabled, "driver_fault", 1, MODE_LATCHED),
    (brake_closes, "driver_fault", 1, MODE_LATCHED),
    (chain_opens, "stop_chain", 1, MODE_LATCHED),
    (grant_lost, "grant", 1, MODE_LATCHED),
    (grant_replaced, "grant", 1, MODE_LATCHED),
    (driver_restarted, "grant", 1, MODE_LATCHED),
    (suspended, "clock_jump", 1, MODE_LATCHED),
    (boot_clock_steps, "clock_jump", 1, MODE_LATCHED),
    (outside_position, "position", 1, MODE_BRAKING),
    (glitch, "position_glitch", 1, MODE_LATCHED),
    (too_fast, "speed", 1, MODE_BRAKING),
    (law_dies, "law_status", 1, MODE_BRAKING),
    (far_from_reference, "tracking_error", 6, MODE_BRAKING),
    (greedy, "torque_demand", 6, MODE_BRAKING),
    (side_thread_silent, "side_thread", 52, MODE_BRAKING),
    (deaf_driver, "loop_delay", 12, MODE_BRAKING),
    (always_late, "late_cycles", 11, MODE_BRAKING),
]


@pytest.mark.parametrize(("plant", "name", "cycles", "mode"), BROKEN, ids=lambda value: getattr(value, "__name__", None))
def test_each_watch_stops_the_law_with_its_own_cause(plant: Callable[[Stand], None], name: str, cycles: int, mode: int) -> None:
    """The fault is planted in live; within the stated cycles the law is out of charge, the cause is right and it stays latched."""
    stand = Stand().to_live()
    plant(stand)
    for k in range(cycles):
        assert stand.mode == MODE_LIVE, f"stopped {cycles - k} cycles early: {stand.says()}"
        stand.step()
    assert stand.mode == mode, stand.says()
    assert stand.cause == name, stand.says()
    for _ in range(400):
        row = stand.step(BIT_START)
        assert np.all(np.isfinite(row["tau_out"]))
        assert stand.mode != MODE_LIVE
    assert stand.cause == name, "the first cause is kept"
    assert stand.mode == MODE_LATCHED
    assert int(stand.row["request"]) == REQUEST_RELEASE


def test_a_law_torque_that_is_not_finite_never_leaves() -> None:
    """A NaN term stops the law; the torque of that cycle and of all after it is finite."""
    stand = Stand().to_live()
    law_says_nan(stand)
    row = stand.step()
    assert math.isnan(float(row["tau_law"][0]))
    assert np.all(np.isfinite(row["tau_out"]))
    assert stand.mode in (MODE_BRAKING, MODE_LATCHED)
    assert stand.cause in ("law_status", "torque_demand", "gate")


def test_a_brake_that_never_opens_is_a_driver_fault() -> None:
    """The start waits for the brake at holding torque, and gives up at the braking deadline."""
    stand = Stand()
    stand.until(MODE_READY)
    stand.step(BIT_START)
    for _ in range(299):
        stand.driver.status |= STATUS_BRAKE
        row = stand.step()
        assert row["tau_out"][:2] == pytest.approx(stand_gravity(*stand.driver.q), rel=SUM_ROUNDING)
    for _ in range(3):
        stand.driver.status |= STATUS_BRAKE
        stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "driver_fault")


def test_braking_beyond_its_deadline_releases() -> None:
    """An arm that does not come to rest is released after the deadline, with that cause."""
    stand = Stand().to_live()
    stand.driver.qd = [0.5, 0.0]
    stand.step(BIT_STOP)
    for _ in range(300):
        stand.step()
    assert stand.mode == MODE_BRAKING
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "brake_deadline")


def test_a_start_that_cannot_hold_the_arm_is_refused() -> None:
    """When the holding torque exceeds its share of the limit, ready is not reached."""
    stand = Stand()
    stand.setup["limits"]["tau_max"][0] = stand_gravity(*stand.driver.q)[0] / 0.8 * 0.999
    for _ in range(100):
        stand.step()
    assert stand.mode == MODE_OFF


def test_old_and_repeated_sequence_numbers_are_not_used() -> None:
    """A replayed state counts as no state: after three such cycles the arm is released."""
    stand = Stand().to_live()
    for _ in range(3):
        stand.driver.sequence -= 1
        stand.step()
        assert stand.mode == MODE_LIVE
    stand.driver.sequence -= 1
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "state_age")
    assert int(stand.memory["link"]["dropped"]) == 4


def test_old_data_that_arrives_in_order_is_seen_by_its_age() -> None:
    """States delayed more and more, in perfect order, trip the age watch at 8 ms, whatever the two clocks say."""
    stand = Stand().to_live()
    for k in range(1, 12):
        stand.driver.clock_offset_ns -= 1_000_000
        stand.step()
        if k < 8:
            assert stand.mode == MODE_LIVE, (k, stand.says())
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "state_age")


def test_another_controllers_grant_keeps_this_one_in_off() -> None:
    """While somebody else holds the grant there is no ready and no torque."""
    stand = Stand()
    stand.driver.holder = SESSION + 1
    for _ in range(100):
        row = stand.step()
        assert int(row["request"]) == REQUEST_ASK
    assert stand.mode == MODE_OFF


def test_margins_are_one_far_from_and_zero_at_the_limit() -> None:
    """Every margin stays in [0, 1], and that of the speed falls as the speed rises."""
    stand = Stand().to_live()
    seen = []
    for speed in (0.0, 1.5, 2.9):
        stand.driver.qd = [speed, 0.0]
        row = stand.step()
        assert np.all((row["margins"] >= 0.0) & (row["margins"] <= 1.0))
        seen.append(float(row["margins"][9]))
    assert seen == pytest.approx([1.0, 0.5, 1.0 - 2.9 / 3.0])
