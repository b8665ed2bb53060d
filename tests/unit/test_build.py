"""A simulated arm built from a run's `sim` part: what goes where, and what the run file's own check cannot see."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from rtctl.arm import load_arm
from rtctl.config.run_file import SimConfig
from rtctl.errors import ConfigError
from rtctl.plant.blocks import REST_BRAKE
from rtctl.plant.build import build_plant, plant_blocks

ARM = load_arm(Path(__file__).resolve().parents[2] / "configs/arms/planar_two.toml")
SIM = SimConfig(
    arm=ARM,
    q_start=(0.2, 0.4),
    substep_count=10,
    state_delay_s=0.001,
    torque_delay_s=0.002,
    lag_s=(0.001, 0.002),
    encoder_quantum=(1e-5, 1e-5),
    stiction_ratio=1.3,
    stop_margin=(0.1, 0.2),
    stop_stiffness=(2e4, 1e4),
    stop_damping=(50.0, 50.0),
    brake_torque=(200.0, 100.0),
    brake_open_s=0.03,
    brake_close_s=0.05,
    valid_for_max_s=0.02,
    silent_max_s=0.2,
    speed_ratio=1.2,
    still_qd=(0.05, 0.05),
    still_dwell_s=0.05,
    tau_measured=True,
    gravity_added=False,
    seed=7,
)


@dataclass
class Run:
    """The part of a run that is used here."""

    path: Path = Path("configs/runs/demo.toml")
    period_ns: int = 1_000_000
    sim: SimConfig | None = SIM


def test_setup_takes_the_arm_from_its_file_and_the_rest_from_the_run():
    """Model, key, torque limit and rest policy are the file's; hard stops lie the margin outside its limits."""
    setup, memory = build_plant(Run())
    assert setup["model"].tobytes() == ARM.model.tobytes()
    assert setup["arm_key"] == ARM.key
    assert list(setup["tau_max"][:2]) == list(ARM.tau_max)
    assert list(setup["qd_max"][:2]) == pytest.approx(1.2 * ARM.qd_max)
    assert list(setup["q_max"][:2] - ARM.q_max) == pytest.approx([0.1, 0.2])
    assert list(ARM.q_min - setup["q_min"][:2]) == pytest.approx([0.1, 0.2])
    assert list(setup["stop_stiffness"][:3]) == [2e4, 1e4, 0.0]
    assert list(setup["lag_s"][:3]) == [0.001, 0.002, 0.0]
    assert list(setup["q_start"][:2]) == [0.2, 0.4]
    assert (setup["period_ns"], setup["state_delay"], setup["torque_delay"]) == (1_000_000, 1, 2)
    assert (setup["valid_for_max_ns"], setup["brake_close_ns"], setup["substeps"]) == (20_000_000, 50_000_000, 10)
    assert ARM.rest.still == "brake"
    assert setup["rest_still"] == REST_BRAKE
    assert setup["rest_moving_ns"] == round(ARM.rest.moving_s * 1e9)
    assert not np.any(np.frombuffer(memory.tobytes(), np.uint8))


def test_every_field_that_must_not_be_zero_is_filled():
    """Limits and times of the driver are positive for every joint of the arm: a forgotten field would be zero."""
    setup, _ = build_plant(Run())
    times = (
        "period_ns",
        "valid_for_max_ns",
        "silent_max_ns",
        "still_dwell_ns",
        "rest_moving_ns",
        "brake_open_ns",
        "brake_close_ns",
    )
    assert all(setup[name] > 0 for name in times)
    joints = ("tau_max", "qd_max", "still_qd", "rest_damping", "stop_stiffness", "encoder_quantum", "brake_torque")
    assert all((setup[name][:2] > 0.0).all() for name in joints)


def test_the_seed_decides_the_session_and_nothing_else():
    """Equal seeds give equal bytes, other seeds another session, always below 2^53; without one the run file's counts."""
    first, again, other = (plant_blocks(SIM, 1_000_000, seed)[0] for seed in (5, 5, 6))
    assert first.tobytes() == again.tobytes()
    assert first["session"] != other["session"]
    other["session"] = first["session"]
    assert other.tobytes() == first.tobytes()
    assert build_plant(Run())[0].tobytes() == plant_blocks(SIM, 1_000_000, 7)[0].tobytes()
    assert all(1 <= build_plant(Run(), seed)[0]["session"] < 2**53 for seed in range(50))


def test_a_run_without_a_simulated_arm_is_refused():
    """There is nothing to simulate: the sentence says what is missing."""
    with pytest.raises(ConfigError) as error:
        build_plant(Run(sim=None))
    assert str(error.value) == (
        "configs/runs/demo.toml: sim: must be a table [sim] with the simulated arm, got nothing. Add one, or run hardware."
    )


def test_long_integration_steps_are_refused():
    """At 50 Hz, 10 substeps of 2 ms are too coarse."""
    with pytest.raises(ConfigError) as error:
        build_plant(Run(period_ns=20_000_000))
    assert str(error.value) == (
        "configs/runs/demo.toml: sim.substep_count: must be >= 20, for integration steps of at most 1 ms, got 10."
    )
