"""Fills the blocks of a simulated arm from the `sim` part of a run. Cold; the run file's own check has been passed before."""

import random
from typing import TYPE_CHECKING

import numpy as np

from rtctl.errors import ConfigError, Finding
from rtctl.kernels.layout import MODEL, new_block
from rtctl.plant.blocks import PLANT_MEMORY, PLANT_SETUP, REST_BRAKE, REST_GRAVITY, REST_ZERO

if TYPE_CHECKING:
    from rtctl.config.run_file import RunConfig, SimConfig

REST_CODES = {"brake": REST_BRAKE, "gravity": REST_GRAVITY, "zero": REST_ZERO}
SESSION_END = 2**53  # session numbers stay below, so that every language can hold them in a float64
SUBSTEP_MAX_NS = 1_000_000  # the order of the integrator is worth nothing at steps of several milliseconds


def build_plant(run: "RunConfig", seed: int | None = None) -> tuple[np.void, np.void]:
    """PLANT_SETUP and zeroed PLANT_MEMORY of a run's simulated arm.

    seed    decides the driver's session number, nothing else; None = the run file's. A driver process takes a random one.

    Raises ConfigError when the run has no simulated arm, or its integration steps are too long.
    """
    if run.sim is None:
        finding = Finding(f"{run.path}: sim", "a table [sim] with the simulated arm", "nothing", next="Add one, or run hardware.")
        raise ConfigError.from_findings([finding])
    least = -(-run.period_ns // SUBSTEP_MAX_NS)
    if run.sim.substep_count < least:
        expected = f">= {least}, for integration steps of at most 1 ms"
        raise ConfigError.from_findings([Finding(f"{run.path}: sim.substep_count", expected, str(run.sim.substep_count))])
    return plant_blocks(run.sim, run.period_ns, run.sim.seed if seed is None else seed)


def plant_blocks(sim: "SimConfig", period_ns: int, seed: int) -> tuple[np.void, np.void]:
    """The two blocks, without checks. Limits, rest policy and arm key are those of the true arm's file."""
    setup = new_block(PLANT_SETUP)
    arm, n = sim.arm, sim.arm.n
    for name in MODEL.names or ():
        setup["model"][name] = arm.model[name]
    setup["arm_key"] = arm.key
    setup["session"] = random.Random(seed).randrange(1, SESSION_END)
    setup["period_ns"], setup["substeps"] = period_ns, sim.substep_count
    setup["state_delay"] = round(sim.state_delay_s * 1e9 / period_ns)
    setup["torque_delay"] = round(sim.torque_delay_s * 1e9 / period_ns)
    for name in ("valid_for_max", "silent_max", "still_dwell", "brake_open", "brake_close"):
        setup[f"{name}_ns"] = round(getattr(sim, f"{name}_s") * 1e9)
    for name in ("q_start", "still_qd", "stop_stiffness", "stop_damping", "lag_s", "encoder_quantum", "brake_torque"):
        setup[name][:n] = getattr(sim, name)
    setup["tau_max"][:n] = arm.tau_max
    setup["qd_max"][:n] = arm.qd_max * sim.speed_ratio
    setup["rest_damping"][:n] = arm.rest.damping
    setup["rest_moving_ns"] = round(arm.rest.moving_s * 1e9)
    setup["rest_still"] = REST_CODES[arm.rest.still]
    setup["gravity_added"], setup["tau_measured"] = sim.gravity_added, sim.tau_measured
    setup["q_min"][:n] = arm.q_min - np.asarray(sim.stop_margin)
    setup["q_max"][:n] = arm.q_max + np.asarray(sim.stop_margin)
    setup["stiction_ratio"] = sim.stiction_ratio
    return setup, new_block(PLANT_MEMORY)
