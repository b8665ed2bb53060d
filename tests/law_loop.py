"""A control law and the simulated arm in the simplest sampled loop: true position and velocity, torque held over a period.

No driver, no messages, no supervisor: what a law does on an exact model, with a latency of whole periods when a test asks for it.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np

from rtctl.kernels.layout import OK
from rtctl.plant.physics import substeps
from tests.law_stand import LawStand
from tests.plants import true_arm

Array = np.ndarray


class LawLoop:
    """A law on the arm its model describes. The arm's friction is left out; limits are out of reach."""

    def __init__(
        self, law: str, model: np.void, gains: dict[str, Any], q_ref: Sequence[float], period_s: float = 1e-3, delay: int = 0
    ) -> None:
        """`delay`: periods between the state and the torque that answers it."""
        self.stand = LawStand(law, model, gains).set(q_ref=list(q_ref))
        self.stand.x["dt_s"] = period_s
        self.setup, self.memory = true_arm(model, tau_max=1e12)
        self.setup["model"]["coulomb"], self.setup["model"]["viscous"] = 0.0, 0.0
        self.memory["brake"] = 2
        self.n, self.period_s = self.stand.n, period_s
        self.waiting = [np.zeros(self.n)] * delay

    @property
    def q(self) -> Array:
        """True positions, (n,)."""
        return self.memory["q"][: self.n].copy()

    def run(self, cycles: int, substep_count: int = 1) -> Array:
        """Errors q_ref - q at the beginning of each cycle, (cycles, n)."""
        errors = np.zeros((cycles, self.n))
        q, qd, q_ref = self.memory["q"], self.memory["qd"], self.stand.x["q_ref"]
        for k in range(cycles):
            errors[k] = (q_ref - q)[: self.n]
            self.waiting.append(self.stand.set(q=q[: self.n], qd=qd[: self.n]).call())
            self.memory["tau_ask"][: self.n] = self.waiting.pop(0)
            assert substeps(self.setup, self.memory, self.period_s / substep_count, substep_count) == OK
        return errors
