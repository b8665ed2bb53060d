"""The ground truth of a simulated arm: what it says of a known motion."""

import pytest

from rtctl.blocks import REQUEST_DRIVE
from rtctl.plant.driver_duty import plant_start
from rtctl.plant.truth import refusal_counts, true_state
from tests.plants import GRAVITY, MS, Controller, chain_model, slider_model, true_arm
from tests.sources import source


@source("cgpm1901", "standard gravity; potential energy m g h of a hanging rod")
def test_energies_of_a_rod_at_rest_and_in_motion():
    """Level minus hanging is m g L/2; the kinetic energy of a rod turning about its end is m L^2 qd^2 / 6."""
    setup, memory = true_arm(chain_model(1))
    hanging = true_state(setup, memory)
    memory["q"][0], memory["qd"][0] = 1.5707963267948966, 3.0
    level = true_state(setup, memory)
    assert level.potential_j - hanging.potential_j == pytest.approx(2.0 * GRAVITY * 0.2, rel=1e-12)
    assert level.kinetic_j == pytest.approx(2.0 * 0.4**2 * 9.0 / 6.0, rel=1e-12)
    assert level.stop_j == 0.0


def test_work_of_drive_and_friction_is_the_gain_in_energy():
    """A slider pushed with 5 N against 2 N of friction: W = 5 d, -2 d, and their sum is the kinetic energy."""
    model = slider_model(2.0)
    model["coulomb"][0] = 2.0
    setup, memory = true_arm(model, valid_for_max_ns=500 * MS)
    plant_start(setup, memory, 0)
    controller = Controller(setup, memory)
    controller.step(12)
    controller.send()
    controller.step()
    for _ in range(200):
        controller.send(REQUEST_DRIVE, (5.0,))
        controller.step()
    truth = true_state(setup, memory)
    assert truth.phase == "drive"
    assert not truth.brake_holds
    assert truth.work_drive_j == pytest.approx(5.0 * truth.q[0], rel=1e-12)
    assert truth.work_friction_j == pytest.approx(-2.0 * truth.q[0], rel=1e-3)
    assert truth.kinetic_j == pytest.approx(truth.work_j, rel=1e-9)


def test_reading_the_truth_changes_nothing_that_moves():
    """Looking at the arm does not change its next step by one bit."""
    ends = []
    for look in (False, True):
        setup, memory = true_arm(chain_model(2), rest_still=2, q_start=[1.0, 0.3])
        plant_start(setup, memory, 0)
        controller = Controller(setup, memory)
        for _ in range(50):
            controller.step()
            if look:
                true_state(setup, memory)
        ends.append(memory["q"].tobytes() + memory["qd"].tobytes())
    assert ends[0] == ends[1]


def test_refusals_are_shown_by_name():
    """Only reasons that occurred are listed."""
    setup, memory = true_arm(slider_model(1.0))
    plant_start(setup, memory, 0)
    controller = Controller(setup, memory)
    controller.step(2)
    assert refusal_counts(memory) == {}
    controller.send(REQUEST_DRIVE, (1.0,))
    controller.send(REQUEST_DRIVE, (1.0,), n=3)
    assert refusal_counts(memory) == {"holder": 1, "length": 1}
