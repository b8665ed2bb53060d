"""What is measured: the shipped arms with six and seven joints, and states spread over their whole range."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rtctl.config.run_file import RunConfig, load_run
from rtctl.places import shipped_file

Array = NDArray[np.float64]

RUNS = {6: "demo", 7: "seven_joint"}
STATES = 64  # calls in turn on different states: no processor learns one of them by heart
SEED = 20250401


@dataclass(frozen=True)
class Subject:
    """An arm and its states, each (STATES, n)."""

    run: RunConfig
    model: np.void
    q: Array
    qd: Array
    qdd: Array
    tau: Array

    @property
    def n(self) -> int:
        """Joints."""
        return int(self.model["n"])


def subject(n: int) -> Subject:
    """The shipped arm with `n` joints; invented data."""
    run = load_run(shipped_file(f"runs/{RUNS[n]}.toml"))
    random = np.random.default_rng(SEED)
    q, qd, qdd, tau = (random.uniform(-2.0, 2.0, (STATES, n)) for _ in range(4))
    return Subject(run, run.arm.model, q, qd, qdd, 10.0 * tau)
