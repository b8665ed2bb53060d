"""Runs of the shipped demonstration arms in lock-step, with the plant changed where a test asks for it."""

from dataclasses import replace
from typing import Any

import numpy as np

from rtctl.assembly import assemble
from rtctl.blocks import BIT_START, MODE_LIVE, MODE_READY
from rtctl.config.run_file import Hold, RunConfig, load_run
from rtctl.loop.lockstep import Lockstep
from rtctl.places import shipped_file
from rtctl.plant.build import build_plant


def demo(name: str = "demo") -> RunConfig:
    """A shipped run."""
    return load_run(shipped_file(f"runs/{name}.toml"))


def holding_still(run: RunConfig, rate_hz: float) -> RunConfig:
    """The same arm, asked to hold its pose at another rate."""
    return replace(run, reference=Hold(kind="hold"), rate_hz=rate_hz, period_ns=round(1e9 / rate_hz))


class Rehearsal:
    """A run in lock-step, started and past its ramp when asked to."""

    def __init__(self, run: RunConfig, law: str | None = None, **plant: Any) -> None:
        """`plant`: fields of PLANT_SETUP to change."""
        self.run = run
        self.assembly = assemble(run, law, session=7)
        self.setup = self.assembly.setup
        self.plant_setup, self.plant_memory = build_plant(run)
        for name, value in plant.items():
            self.plant_setup[name] = value
        self.lockstep = Lockstep(self.setup, self.assembly.pointers[self.assembly.law], self.plant_setup, self.plant_memory)

    def exact(self) -> "Rehearsal":
        """Let the arm be what the controller thinks it is: same model, no friction, no lag, no delay, exact encoders."""
        model = self.setup["model"]
        model["viscous"], model["coulomb"] = 0.0, 0.0
        for name in model.dtype.names or ():
            self.plant_setup["model"][name] = model[name]
        for name in ("lag_s", "encoder_quantum", "state_delay", "torque_delay"):
            self.plant_setup[name] = 0
        return self

    def start(self) -> "Rehearsal":
        """Ready, start, brake open, ramp over."""
        rate = self.run.rate_hz
        rows = self.lockstep.advance(round(0.5 * rate))
        assert int(rows["mode"][-1]) == MODE_READY
        rows = self.lockstep.advance(round(0.4 * rate), {0: BIT_START})
        assert int(rows["mode"][-1]) == MODE_LIVE
        return self

    def motion(self, seconds: float) -> np.ndarray:
        """Rows of a whole motion: ready, start, `seconds` of time."""
        self.lockstep.advance(round(0.5 * self.run.rate_hz))
        return self.lockstep.advance(round(seconds * self.run.rate_hz), {0: BIT_START})
