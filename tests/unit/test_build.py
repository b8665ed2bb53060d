"""A simulated arm built from an arm file and its settings: what goes where, and every wrong setting named at once."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from rtctl.arm import load_arm
from rtctl.errors import ConfigError
from rtctl.plant.blocks import REST_BRAKE
from rtctl.plant.build import PlantSettings, build_plant

ARM = load_arm(Path(__file__).resolve().parents[2] / "configs/arms/planar_two.toml")
SETTINGS = PlantSettings(
    period_s=0.001,
    substeps=10,
    state_delay_s=0.001,
    torque_delay_s=0.002,
    valid_for_max_s=0.02,
    silent_max_s=0.2,
    still_qd=0.05,
    still_dwell_s=0.05,
    speed_ratio=1.2,
    stop_margin=0.1,
    stop_stiffness=(2e4, 1e4),
    stop_damping=50.0,
    stiction_ratio=1.3,
    lag_s=0.001,
    encoder_quantum=1e-5,
    brake_torque=200.0,
    brake_open_s=0.03,
    brake_close_s=0.05,
    q_start=(0.2, 0.4),
)


def test_setup_takes_the_arm_from_its_file_and_the_rest_from_the_settings():
    """Model, key, torque limit and rest policy are the file's; hard stops lie the margin outside its limits."""
    setup, memory = build_plant(ARM, SETTINGS, seed=1)
    assert setup["model"].tobytes() == ARM.model.tobytes()
    assert setup["arm_key"] == ARM.key
    assert list(setup["tau_max"][:2]) == list(ARM.tau_max)
    assert list(setup["qd_max"][:2]) == pytest.approx(1.2 * ARM.qd_max)
    assert list(setup["q_max"][:2] - ARM.q_max) == pytest.approx([0.1, 0.1])
    assert list(ARM.q_min - setup["q_min"][:2]) == pytest.approx([0.1, 0.1])
    assert list(setup["stop_stiffness"][:3]) == [2e4, 1e4, 0.0]
    assert (setup["period_ns"], setup["state_delay"], setup["torque_delay"]) == (1_000_000, 1, 2)
    assert (setup["valid_for_max_ns"], setup["brake_close_ns"]) == (20_000_000, 50_000_000)
    assert ARM.rest.still == "brake"
    assert setup["rest_still"] == REST_BRAKE
    assert setup["rest_moving_ns"] == round(ARM.rest.moving_s * 1e9)
    assert not np.any(np.frombuffer(memory.tobytes(), np.uint8))


def test_the_seed_decides_the_session_and_nothing_else():
    """Equal seeds give equal bytes, other seeds another session, always below 2^53."""
    first, again, other = (build_plant(ARM, SETTINGS, seed)[0] for seed in (5, 5, 6))
    assert first.tobytes() == again.tobytes()
    assert first["session"] != other["session"]
    other["session"] = first["session"]
    assert other.tobytes() == first.tobytes()
    assert all(1 <= build_plant(ARM, SETTINGS, seed)[0]["session"] < 2**53 for seed in range(50))


def refused(**values: object) -> str:
    with pytest.raises(ConfigError) as error:
        build_plant(ARM, replace(SETTINGS, **values), 0, where="demo.toml: sim")
    return str(error.value)


def test_every_wrong_number_is_named_at_once():
    """All settings out of range are reported in one error, each with its place, what was expected and what came."""
    assert refused(period_s=-1.0, stiction_ratio=0.5, lag_s=(0.1, float("nan")), brake_torque=(1.0,)) == (
        "demo.toml: sim.period_s: must be a finite number > 0, got -1.0.\n"
        "demo.toml: sim.stiction_ratio: must be a finite number >= 1, got 0.5.\n"
        "demo.toml: sim.lag_s: must be a finite number >= 0, got nan.\n"
        "demo.toml: sim.brake_torque: must be one value or 2, one per joint, got 1 values."
    )


def test_substeps_must_divide_the_period():
    """Sample times stay on a grid of whole nanoseconds only if the steps fit."""
    assert refused(substeps=3) == (
        "demo.toml: sim.substeps: must be a divisor of the period in ns, got 3 substeps of 1000000 ns."
    )


def test_long_integration_steps_are_refused():
    """The order of the integrator is worth nothing at steps of several milliseconds."""
    assert refused(period_s=0.01, substeps=5, state_delay_s=0.0, torque_delay_s=0.0) == (
        "demo.toml: sim.substeps: must be enough for integration steps of at most 1 ms, got 2 ms. Raise it."
    )


@pytest.mark.parametrize("delay_s", [0.0005, 0.064])
def test_delays_are_whole_periods_and_fit_the_line(delay_s):
    """A delay between periods, or longer than the line, is refused instead of rounded."""
    assert refused(torque_delay_s=delay_s) == (
        f"demo.toml: sim.torque_delay_s: must be a whole number of periods of 0.001 s, at most 63, got {delay_s:g} s."
    )


def test_the_start_must_lie_within_the_limits_and_fit_the_arm():
    """A start pose of another arm, or outside the limits, is refused with the joint's name."""
    assert refused(q_start=(0.2,)) == "demo.toml: sim.q_start: must be 2 values, one per joint, got 1 values."
    low, high, name = ARM.q_min[1], ARM.q_max[1], ARM.joint_names[1]
    assert refused(q_start=(0.2, 9.0)) == (
        f"demo.toml: sim.q_start[1]: must be within {low:g} to {high:g} rad, the limits of {name}, got 9 rad."
    )
