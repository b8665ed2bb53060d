"""Each rule of the simulated driver, broken on purpose: grant, age, limits, rest policy, brakes, echo, delay lines."""

import math

import numpy as np
import pytest

from rtctl.blocks import (
    REQUEST_ASK,
    REQUEST_DRIVE,
    REQUEST_RELEASE,
    STATE,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_GRAVITY_ADDED,
    STATUS_SIMULATED,
    STATUS_STOP_CHAIN_CLOSED,
)
from rtctl.kernels.layout import OK, new_block
from rtctl.plant import blocks
from rtctl.plant.blocks import PHASE_CLOSING, PHASE_DRIVE, PHASE_MOVING, PHASE_STILL, PLANT_MEMORY
from rtctl.plant.driver_duty import plant_advance, plant_receive, plant_retire, plant_start, plant_state
from tests.plants import DRIVER, GRAVITY, MS, SECOND, Controller, chain_model, slider_model, true_arm

HOLD = (0.0, 0.0)  # two hanging rods need no torque


def standing_arm(**values: object) -> tuple[np.void, np.void, Controller]:
    """A two-joint arm that hangs still in its rest policy, and a controller that has read its state."""
    setup, memory = true_arm(chain_model(2), **values)
    plant_start(setup, memory, 1000 * MS)
    controller = Controller(setup, memory)
    controller.step(12)
    return setup, memory, controller


def driven_arm(**values: object) -> tuple[np.void, np.void, Controller]:
    """The same arm after the grant and the first accepted torque, brakes open."""
    setup, memory, controller = standing_arm(**values)
    assert controller.send() == OK
    controller.step()
    for _ in range(10):
        assert controller.send(REQUEST_DRIVE, HOLD) == OK
        controller.step()
    assert memory["phase"] == PHASE_DRIVE
    return setup, memory, controller


def kick(memory: np.void) -> None:
    memory["qd"][:2] = (1.0, -0.5)


# ---- grant ---------------------------------------------------------------------------------------------------------------------


def test_ask_of_a_still_arm_gets_a_numbered_grant_and_moves_nothing():
    """The first ask gets grant 1; the state shows number and holder; brakes stay closed and no torque flows."""
    _, memory, controller = standing_arm()
    assert controller.send() == OK
    state = controller.step(30)
    assert (state["holder"], state["grant"]) == (controller.session, 1)
    assert state["status"] & STATUS_BRAKE
    assert not memory["tau"].any()


def test_a_second_controller_gets_nothing_while_the_first_holds():
    """Ask, drive and release of another session are refused, and the holder's echo is not disturbed."""
    setup, memory, first = driven_arm()
    second = Controller(setup, memory, SECOND)
    second.now_ns = first.now_ns
    second.state = first.state
    before = memory.tobytes()
    for request in (REQUEST_ASK, REQUEST_DRIVE, REQUEST_RELEASE):
        assert second.send(request, (3.0, 3.0)) == blocks.REFUSED_HOLDER
    memory["refused"] = 0
    assert memory.tobytes() == before


def test_ask_while_a_joint_moves_is_not_granted():
    """No grant before all joints have been still for the dwell."""
    setup, memory = true_arm(chain_model(2), rest_still=blocks.REST_ZERO)
    plant_start(setup, memory, 0)
    controller = Controller(setup, memory)
    controller.step(12)
    kick(memory)
    controller.step()
    assert controller.send() == OK
    assert controller.step()["holder"] == 0


def test_ask_while_the_brakes_still_close_is_not_granted():
    """The rest policy must have reached its still part before anybody gets the grant."""
    _, memory, controller = driven_arm()
    controller.send(REQUEST_RELEASE)
    controller.step(2)
    assert memory["phase"] == PHASE_CLOSING
    controller.send()
    assert controller.step()["holder"] == 0
    controller.step(10)
    controller.send()
    assert controller.step()["holder"] == controller.session


@pytest.mark.parametrize("wrong", ["fault", "stop_chain"])
def test_no_grant_with_a_fault_or_an_open_stop_chain(wrong):
    """A driver that is not healthy grants nothing."""
    _, memory, controller = standing_arm()
    if wrong == "fault":
        memory["fault"] = 1
    else:
        memory["stop_chain_closed"] = 0
    controller.send()
    assert controller.step()["holder"] == 0


def test_drive_without_a_grant_does_nothing():
    """Torque before any ask is refused; brakes stay closed."""
    _, memory, controller = standing_arm()
    assert controller.send(REQUEST_DRIVE, HOLD) == blocks.REFUSED_HOLDER
    assert memory["phase"] == PHASE_STILL


def test_drive_with_the_number_of_an_earlier_grant_is_refused():
    """After release and a second grant, torque with the first number does not count."""
    _, memory, controller = driven_arm()
    controller.send(REQUEST_RELEASE)
    controller.step(30)
    controller.send()
    controller.step()
    assert controller.state["grant"] == 2
    assert controller.send(REQUEST_DRIVE, HOLD, grant=1) == blocks.REFUSED_GRANT
    assert controller.send(REQUEST_DRIVE, HOLD, grant=3) == blocks.REFUSED_GRANT
    assert memory["phase"] == PHASE_STILL
    assert controller.send(REQUEST_DRIVE, HOLD, grant=2) == OK


def test_a_message_for_the_driver_before_its_restart_is_refused():
    """Another driver session makes ask, drive and release void, and leaves no echo."""
    _, memory, controller = driven_arm()
    echo = int(memory["received_sequence"])
    for request in (REQUEST_ASK, REQUEST_DRIVE, REQUEST_RELEASE):
        assert controller.send(request, HOLD, driver_session=DRIVER + 1) == blocks.REFUSED_DRIVER_SESSION
    assert memory["holder"] == controller.session
    assert memory["received_sequence"] == echo


def test_a_restart_ends_the_grant():
    """A driver that restarts holds no grant, and torque of the old grant is refused by its new session number."""
    setup, _, controller = driven_arm()
    fresh = new_block(PLANT_MEMORY)
    setup["session"] = DRIVER + 1
    plant_start(setup, fresh, controller.now_ns)
    controller.memory = fresh
    assert fresh["holder"] == 0
    assert controller.send(REQUEST_DRIVE, HOLD) == blocks.REFUSED_DRIVER_SESSION


@pytest.mark.parametrize("back", [0, 1, 5])
def test_a_repeated_or_older_sequence_is_refused(back):
    """Sequence numbers of a session must grow, else the torque is not applied."""
    _, memory, controller = driven_arm()
    assert controller.send(REQUEST_DRIVE, (1.0, 1.0), sequence=controller.sequence - back) == blocks.REFUSED_SEQUENCE
    assert not memory["tau_command"].any()


def test_a_holder_that_falls_silent_before_its_first_torque_loses_the_grant():
    """Asks keep an unused grant; without them it ends, so that a dead controller does not block the next one."""
    setup, memory, controller = standing_arm()
    controller.send()
    for _ in range(250):
        controller.step()
        controller.send()
    assert controller.step()["holder"] == controller.session
    controller.step(100)
    assert controller.state["holder"] == 0
    assert controller.send(REQUEST_DRIVE, HOLD) == blocks.REFUSED_HOLDER
    second = Controller(setup, memory, SECOND)
    second.step()
    second.send()
    assert second.step()["holder"] == SECOND
    assert second.state["grant"] == 2


# ---- age -----------------------------------------------------------------------------------------------------------------------


def test_torque_lapses_at_its_validity_counted_from_the_sample_it_answers():
    """Three periods after the answered sample plus 5 ms validity: the torque ends 5 ms after the sample, not after arrival."""
    _, memory, controller = driven_arm()
    answered = controller.state["sequence"]
    controller.step(3)
    assert controller.send(REQUEST_DRIVE, HOLD, state_sequence=answered, valid_for_ns=5 * MS) == OK
    controller.step(1)
    assert memory["phase"] == PHASE_DRIVE
    controller.step(1)
    assert memory["holder"] == 0
    assert memory["lapses"] == 1
    assert memory["phase"] != PHASE_DRIVE


def test_the_drivers_own_bound_beats_a_longer_validity():
    """A message that claims to be valid for a minute is valid for the driver's own maximum."""
    _, memory, controller = driven_arm(valid_for_max_ns=7 * MS)
    controller.send(REQUEST_DRIVE, HOLD, valid_for_ns=60_000 * MS)
    controller.step(6)
    assert memory["phase"] == PHASE_DRIVE
    controller.step(1)
    assert memory["holder"] == 0


def test_a_torque_that_arrives_after_its_validity_is_refused_and_revives_nothing():
    """A message delayed for 6 ms with 5 ms validity is old; the lapse it would have bridged is final."""
    _, memory, controller = driven_arm()
    late = controller.message(REQUEST_DRIVE, HOLD)
    controller.step(3)
    assert plant_receive(controller.setup, memory, late, controller.now_ns) == OK
    second_late = controller.message(REQUEST_DRIVE, HOLD)
    controller.now_ns += 6 * MS
    assert plant_receive(controller.setup, memory, second_late, controller.now_ns) == blocks.REFUSED_HOLDER
    assert memory["lapses"] == 1


def test_an_old_torque_within_a_live_grant_is_refused():
    """While a fresh torque holds, one that answers a sample older than its validity does not count."""
    _, memory, controller = driven_arm(valid_for_max_ns=100 * MS)
    answered = controller.state["sequence"]
    controller.step(2)
    assert controller.send(REQUEST_DRIVE, HOLD, valid_for_ns=100 * MS) == OK
    controller.step(10)
    assert controller.send(REQUEST_DRIVE, (1.0, 1.0), state_sequence=answered) == blocks.REFUSED_OLD
    assert not memory["tau_command"].any()


@pytest.mark.parametrize("valid_for_ns", [0])
def test_a_torque_without_validity_is_refused(valid_for_ns):
    """Validity zero means never valid."""
    _, _, controller = driven_arm()
    assert controller.send(REQUEST_DRIVE, HOLD, valid_for_ns=valid_for_ns) == blocks.REFUSED_OLD


@pytest.mark.parametrize("offset", [1, 10**15, -256, -(10**15)])
def test_a_torque_must_answer_a_state_the_driver_sent_and_remembers(offset):
    """A future state, or one beyond the history, has no known sample time."""
    _, memory, controller = driven_arm(valid_for_max_ns=2000 * MS)
    for _ in range(300):
        controller.send(REQUEST_DRIVE, HOLD)
        controller.step()
    answered = int(memory["sequence"]) + offset
    wish = controller.send(REQUEST_DRIVE, HOLD, state_sequence=answered, valid_for_ns=2000 * MS)
    assert wish == blocks.REFUSED_ANSWER
    assert controller.send(REQUEST_DRIVE, HOLD, state_sequence=int(memory["sequence"]) - 255, valid_for_ns=2000 * MS) == OK


def test_a_lapsed_arm_never_resumes_by_itself():
    """After a lapse the old grant's torque stays refused for ever; asking again, at rest, gives a new number and no motion."""
    _, memory, controller = driven_arm()
    grant = int(controller.state["grant"])
    controller.step(8)
    for _ in range(60):
        assert controller.send(REQUEST_DRIVE, (2.0, 2.0), grant=grant) == blocks.REFUSED_HOLDER
        controller.step()
    assert memory["phase"] == PHASE_STILL
    assert memory["accepted"] == 10
    controller.send()
    controller.step()
    assert controller.state["grant"] == grant + 1
    assert controller.state["status"] & STATUS_BRAKE


# ---- content -------------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("joint", [0, 1])
@pytest.mark.parametrize("poison", [math.nan, math.inf, -math.inf])
def test_a_torque_that_is_not_finite_is_refused(poison, joint):
    """NaN or infinity in any joint: nothing of the message is applied."""
    _, memory, controller = driven_arm()
    tau = [1.0, 1.0]
    tau[joint] = poison
    assert controller.send(REQUEST_DRIVE, tuple(tau)) == blocks.REFUSED_NOT_FINITE
    assert not memory["tau_command"].any()


def test_a_torque_over_the_drivers_own_limit_is_refused():
    """The driver's limit holds to the last bit in both directions; the limit itself is allowed; refusals let the grant lapse."""
    _, memory, controller = driven_arm(tau_max=[30.0, 10.0])
    beyond = math.nextafter(10.0, 11.0)
    for tau in ((0.0, beyond), (0.0, -beyond), (31.0, 0.0), (-1e300, 0.0)):
        assert controller.send(REQUEST_DRIVE, tau) == blocks.REFUSED_LIMIT
    assert not memory["tau_command"].any()
    assert controller.send(REQUEST_DRIVE, (-30.0, 10.0)) == OK
    for _ in range(6):
        controller.step()
        controller.send(REQUEST_DRIVE, (31.0, 0.0))
    assert memory["holder"] == 0
    assert memory["lapses"] == 1


@pytest.mark.parametrize("n", [0, 1, 3, 16])
def test_a_torque_of_another_length_is_refused(n):
    """One value per joint, not more and not fewer."""
    _, _, controller = driven_arm()
    assert controller.send(REQUEST_DRIVE, HOLD, n=n) == blocks.REFUSED_LENGTH


@pytest.mark.parametrize("field", ["version", "arm_key", "session"])
def test_a_message_of_another_identity_is_refused(field):
    """Another version, arm or an empty session number: refused without an echo."""
    _, memory, controller = driven_arm()
    echo = int(memory["received_sequence"])
    assert controller.send(REQUEST_DRIVE, HOLD, **{field: 0}) == blocks.REFUSED_IDENTITY
    assert memory["received_sequence"] == echo


def test_an_unknown_request_is_refused():
    """A request code that is not in the list does nothing."""
    _, memory, controller = driven_arm()
    assert controller.send(3, HOLD) == blocks.REFUSED_REQUEST
    assert memory["phase"] == PHASE_DRIVE


def test_refusals_are_counted_by_reason_and_every_reason_has_a_name():
    """Each refusal raises exactly its own counter."""
    _, memory, controller = driven_arm()
    controller.send(REQUEST_DRIVE, HOLD, n=1)
    controller.send(REQUEST_DRIVE, (math.nan, 0.0))
    controller.send(REQUEST_DRIVE, (math.nan, 0.0))
    counts = {name: int(memory["refused"][k]) for k, name in enumerate(blocks.REFUSAL_NAMES) if memory["refused"][k]}
    assert counts == {"length": 1, "not finite": 2}
    codes = [value for name, value in vars(blocks).items() if name.startswith("REFUSED_")]
    assert sorted(-code for code in codes) == list(range(1, len(blocks.REFUSAL_NAMES)))


# ---- brakes and rest policy ----------------------------------------------------------------------------------------------------


def test_the_brake_opens_after_the_first_accepted_drive_only():
    """Ask leaves it closed; the first drive opens it after the opening time, and the state shows it closed until then."""
    setup, memory, controller = standing_arm()
    controller.send()
    assert controller.step()["status"] & STATUS_BRAKE
    closed = 0
    for _ in range(10):
        controller.send(REQUEST_DRIVE, HOLD)
        closed += bool(controller.step()["status"] & STATUS_BRAKE)
    assert closed == setup["brake_open_ns"] // MS - 1
    assert memory["brake"] == blocks.BRAKE_OPEN


def test_a_horizontal_arm_does_not_drop_when_brakes_open_or_close():
    """Overlap: with holding torque from the first cycle, and kept after a release at rest, the arm stands still throughout."""
    setup, memory = true_arm(chain_model(1), q_start=[np.pi / 2])
    hold = (2.0 * GRAVITY * 0.2,)  # m g L/2
    plant_start(setup, memory, 0)
    controller = Controller(setup, memory)
    controller.step(12)
    controller.send()
    controller.step()
    for _ in range(50):
        controller.send(REQUEST_DRIVE, hold)
        controller.step()
    controller.send(REQUEST_RELEASE)
    controller.step(100)
    assert memory["phase"] == PHASE_STILL
    assert abs(memory["q"][0] - np.pi / 2) < 1e-9
    assert memory["qd"][0] == 0.0


def test_release_ends_the_grant_at_once_and_a_moving_arm_is_damped_before_the_brakes_close():
    """Moving part first: the brakes must not close at speed while the moving time lasts."""
    _, memory, controller = driven_arm()
    kick(memory)
    controller.step()
    controller.send(REQUEST_RELEASE)
    assert memory["holder"] == 0
    controller.step(50)
    assert memory["phase"] == PHASE_MOVING
    assert memory["brake"] == blocks.BRAKE_OPEN
    measured = float(memory["qd_meas"][0])
    controller.step()
    assert memory["tau"][0] == pytest.approx(-5.0 * measured, rel=1e-12)
    controller.step(400)
    assert memory["phase"] == PHASE_STILL
    assert memory["brake"] == blocks.BRAKE_CLOSED
    assert not memory["qd"].any()


def test_the_moving_part_ends_after_its_time_even_if_the_arm_still_moves():
    """With no damping at all the brakes close when the moving time is over."""
    setup, memory, controller = driven_arm(rest_damping=0.0)
    kick(memory)
    controller.step()
    controller.send(REQUEST_RELEASE)
    controller.step(int(setup["rest_moving_ns"]) // MS - 1)
    assert memory["phase"] == PHASE_MOVING
    controller.step(2)
    assert memory["phase"] == PHASE_CLOSING
    assert memory["brake"] == blocks.BRAKE_CLOSING


def test_damping_of_the_rest_policy_respects_the_drives_limit():
    """The drives saturate, whatever the damping asks."""
    _, memory, controller = driven_arm(tau_max=[2.0, 2.0], rest_damping=500.0)
    kick(memory)
    controller.step()
    controller.send(REQUEST_RELEASE)
    controller.step()
    assert abs(memory["tau"][:2]).max() == 2.0
    assert memory["saturated"] > 0


def test_gravity_policy_holds_a_level_arm_without_brakes():
    """Still part `gravity`: after a lapse the arm keeps its pose; no brake is ever reported."""
    setup, memory = true_arm(chain_model(2), rest_still=blocks.REST_GRAVITY, q_start=[1.2, 0.4])
    plant_start(setup, memory, 0)
    controller = Controller(setup, memory)
    controller.step(2000)
    assert abs(memory["q"][:2] - (1.2, 0.4)).max() < 1e-3
    assert not controller.state["status"] & STATUS_BRAKE
    assert memory["tau"][0] == pytest.approx(2 * GRAVITY * (0.6 * np.sin(1.2) + 0.2 * np.sin(1.6)), abs=1e-2)


def test_zero_policy_gives_no_torque():
    """Still part `zero`: an arm under gravity swings freely, which is why it is not safe for such arms."""
    setup, memory = true_arm(chain_model(2), rest_still=blocks.REST_ZERO, q_start=[1.2, 0.4])
    plant_start(setup, memory, 0)
    Controller(setup, memory).step(200)
    assert not memory["tau"].any()
    assert abs(memory["q"][0] - 1.2) > 0.1


@pytest.mark.parametrize("wrong", ["fault", "stop_chain"])
def test_a_fault_or_open_stop_chain_ends_the_grant_and_closes_the_brakes_unpowered(wrong):
    """No torque from then on, brakes closed after their time, status says which, and the grant is gone for good."""
    setup, memory, controller = driven_arm()
    kick(memory)
    memory["fault" if wrong == "fault" else "stop_chain_closed"] = 1 if wrong == "fault" else 0
    state = controller.step(1 + int(setup["brake_close_ns"]) // MS)
    assert state["holder"] == 0
    assert not memory["tau"].any()
    assert memory["brake"] == blocks.BRAKE_CLOSED
    assert not state["status"] & STATUS_ENABLED
    assert bool(state["status"] & STATUS_FAULT) == (wrong == "fault")
    assert bool(state["status"] & STATUS_STOP_CHAIN_CLOSED) == (wrong == "fault")


def test_a_joint_faster_than_the_drivers_own_limit_ends_the_grant():
    """The driver does not wait for the controller: above its own speed limit the rest policy takes over."""
    _, memory, controller = driven_arm(qd_max=[1.0, 1.0])
    memory["qd"][0] = 0.9
    controller.step(2)
    assert controller.state["holder"] == controller.session
    memory["qd"][0] = 1.5
    assert controller.step(2)["holder"] == 0
    assert memory["overspeeds"] == 1
    assert controller.send(REQUEST_DRIVE, HOLD) == blocks.REFUSED_HOLDER


def test_a_driver_about_to_end_brings_the_arm_to_rest_and_grants_nothing_more():
    """The grant ends, a moving arm is damped, brakes close, and a new ask stays without an answer."""
    setup, memory, controller = driven_arm()
    kick(memory)
    controller.step()
    plant_retire(setup, memory, controller.now_ns)
    assert controller.send(REQUEST_DRIVE, HOLD) == blocks.REFUSED_HOLDER
    controller.step(1000)
    assert (memory["phase"], memory["brake"]) == (PHASE_STILL, blocks.BRAKE_CLOSED)
    controller.send()
    assert controller.step()["holder"] == 0


def test_release_while_the_brakes_open_leaves_them_closed():
    """A release within the opening time: the brakes never let go."""
    _, memory, controller = standing_arm()
    controller.send()
    controller.step()
    controller.send(REQUEST_DRIVE, HOLD)
    controller.step()
    assert memory["brake"] == blocks.BRAKE_OPENING
    controller.send(REQUEST_RELEASE)
    assert (memory["brake"], memory["phase"]) == (blocks.BRAKE_CLOSED, PHASE_STILL)


# ---- state, echo, delay lines --------------------------------------------------------------------------------------------------


def test_state_echoes_the_last_received_and_the_last_applied_message():
    """An ask is received, not applied; a drive is both; a refused drive is received only."""
    _, _, controller = standing_arm()
    controller.send()
    state = controller.step()
    assert (state["received_session"], state["received_sequence"]) == (controller.session, 1)
    assert (state["applied_session"], state["applied_sequence"]) == (0, 0)
    controller.send(REQUEST_DRIVE, HOLD)
    state = controller.step()
    assert (state["applied_session"], state["applied_sequence"]) == (controller.session, 2)
    controller.send(REQUEST_DRIVE, (math.nan, 0.0))
    state = controller.step()
    assert (state["received_sequence"], state["applied_sequence"]) == (3, 2)


def test_state_is_simulated_and_carries_identity():
    """The simulated bit is always set; key, session, version, length and sample grid are right."""
    setup, _, controller = standing_arm(gravity_added=1)
    state = controller.state
    assert state["status"] & STATUS_SIMULATED
    assert state["status"] & STATUS_GRAVITY_ADDED
    assert (state["arm_key"], state["session"], state["n"], state["tau_count"]) == (setup["arm_key"], DRIVER, 2, 2)
    assert state["sample_ns"] == controller.now_ns
    assert state["sequence"] == 13


def test_position_is_counted_in_encoder_quanta_and_velocity_is_their_difference():
    """q is the nearest count; qd is the difference of counts over the period, so a slow joint shows steps of quantum / period."""
    quantum = 2 * np.pi / 2**14
    setup, memory = true_arm(chain_model(1, gravity=0.0), encoder_quantum=[quantum], rest_still=blocks.REST_ZERO)
    plant_start(setup, memory, 0)
    memory["qd"][0] = 0.05
    controller = Controller(setup, memory)
    seen = []
    for _ in range(100):
        state = controller.step()
        assert abs(state["q"][0] - memory["q"][0]) <= quantum / 2 * (1 + 1e-9)
        assert state["q"][0] / quantum == pytest.approx(round(state["q"][0] / quantum), abs=1e-6)
        seen.append(state["qd"][0] / (quantum / 1e-3))
    assert set(np.round(seen)) == {0.0, 1.0}
    assert np.abs(np.array(seen) - np.round(seen)).max() < 1e-6
    assert np.mean(seen) * quantum / 1e-3 == pytest.approx(0.05, abs=quantum / 0.1)


def test_samples_stay_on_the_grid_of_a_period_that_substeps_do_not_divide():
    """At 300 Hz with 7 substeps, 900 periods are 900 times the period, and a free slider covers exactly its way."""
    period_ns = 3_333_333
    setup, memory = true_arm(slider_model(1.0), period_ns=period_ns, substeps=7, rest_still=blocks.REST_ZERO)
    plant_start(setup, memory, 0)
    memory["qd"][0] = 1.0
    state = Controller(setup, memory).step(900)
    assert state["sample_ns"] == 900 * period_ns
    assert state["sequence"] == 901
    assert state["q"][0] == pytest.approx(900 * period_ns * 1e-9, rel=1e-12)


@pytest.mark.parametrize("delay", [0, 1, 2, 7, 63])
def test_state_delay_is_exact(delay):
    """The state read at step k is the one sampled at step k - delay, whole; before that there is none."""
    setup, memory = true_arm(slider_model(1.0), state_delay=delay, rest_still=blocks.REST_ZERO)
    plant_start(setup, memory, 0)
    memory["qd"][0] = 1.0
    state = new_block(STATE)
    for k in range(80):
        if k:
            plant_advance(setup, memory, k * MS)
        status = plant_state(setup, memory, k * MS, state)
        if k < delay:
            assert status == blocks.NO_STATE_YET
        else:
            assert status == OK
            assert (state["sequence"], state["sample_ns"]) == (k - delay + 1, (k - delay) * MS)
            assert state["q"][0] == pytest.approx((k - delay) * 1e-3, abs=1e-12)


@pytest.mark.parametrize("delay", [0, 1, 2, 7, 63])
def test_torque_delay_is_exact(delay):
    """A torque sent at step k acts from step k + delay: the speed of a free slider after it shows when it began."""
    setup, memory = true_arm(
        slider_model(1.0), torque_delay=delay, rest_still=blocks.REST_ZERO, valid_for_max_ns=500 * MS, silent_max_ns=10**12
    )
    plant_start(setup, memory, 0)
    controller = Controller(setup, memory)
    controller.step(12)
    controller.send()
    controller.step(delay + 2)
    assert controller.state["holder"] == controller.session
    assert controller.send(REQUEST_DRIVE, (1.0,), valid_for_ns=500 * MS) == OK
    controller.step(delay)
    assert memory["qd"][0] == 0.0
    controller.step(3)
    assert memory["qd"][0] == pytest.approx(3e-3, rel=1e-12)


def test_a_full_torque_delay_line_refuses():
    """More messages under way than the line holds are refused and counted, never lost silently."""
    setup, memory, controller = standing_arm(torque_delay=5)
    answers = [controller.send() for _ in range(blocks.LINE + 3)]
    assert answers == [OK] * blocks.LINE + [blocks.REFUSED_QUEUE] * 3
    assert memory["refused"][-blocks.REFUSED_QUEUE] == 3


def test_lag_of_the_drives_follows_the_exponential():
    """Torque after a step is 1 - exp(-t / lag), exact at the substeps."""
    setup, memory, controller = driven_arm(lag_s=[0.004, 0.0])
    controller.send(REQUEST_DRIVE, (1.0, 1.0))
    controller.step(3)
    assert memory["tau"][0] == pytest.approx(1.0 - math.exp(-3.0 / 4.0), rel=1e-12)
    assert memory["tau"][1] == 1.0


def test_a_process_that_stood_still_skips_time_instead_of_integrating_it():
    """After 10 s of standstill only whole periods are jumped over, the grant has lapsed, and the next sample is on the grid."""
    _, memory, controller = driven_arm()
    controller.now_ns += 9_999 * MS
    controller.step()
    assert memory["skipped_ns"] == 9_999 * MS
    assert memory["holder"] == 0
    assert memory["lapses"] == 1
    assert int(memory["time_ns"]) % MS == 0


def test_same_calls_give_the_same_bytes():
    """Two arms with the same setup and the same messages end in identical memory, bit for bit."""

    def run() -> bytes:
        setup, memory, controller = driven_arm(
            stiction_ratio=1.3, encoder_quantum=1e-4, lag_s=0.002, state_delay=1, torque_delay=1
        )
        setup["model"]["coulomb"][:2] = 0.4
        for k in range(200):
            controller.send(REQUEST_DRIVE, (math.sin(0.1 * k), 0.3 * math.cos(0.07 * k)))
            controller.step()
        return memory.tobytes()

    assert run() == run()
