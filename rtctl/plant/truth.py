"""Ground truth of a simulated arm: the exact motion and energy balance that no message shows. For tests, drills and reports."""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from rtctl.plant.blocks import BRAKE_CLOSED, BRAKE_OPENING, PHASE_NAMES, REFUSAL_NAMES
from rtctl.plant.physics import true_energy

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Truth:
    """The true arm at one instant; energies and works in J."""

    time_ns: int  # driver's clock
    q: FloatArray  # (n,) rad (m), exact
    qd: FloatArray  # (n,) rad/s (m/s)
    tau: FloatArray  # (n,) N m (N), delivered by the drives
    kinetic_j: float
    potential_j: float
    stop_j: float  # in the springs of the hard stops
    work_drive_j: float  # since the start
    work_friction_j: float  # friction and brakes
    work_stop_j: float
    brake_holds: bool
    phase: str

    @property
    def energy_j(self) -> float:
        """Kinetic and potential energy of the arm, without the stops."""
        return self.kinetic_j + self.potential_j

    @property
    def work_j(self) -> float:
        """Work of drives, friction and stops since the start: the change of `energy_j`, up to the integrator's error."""
        return self.work_drive_j + self.work_friction_j + self.work_stop_j


def true_state(setup: np.void, memory: np.void) -> Truth:
    """The truth now. Not for the loop: it allocates, and the arm must not be advanced meanwhile."""
    n = int(setup["model"]["n"])
    parts = np.zeros(3)
    true_energy(setup, memory, parts)
    return Truth(
        time_ns=int(memory["time_ns"]),
        q=memory["q"][:n].copy(),
        qd=memory["qd"][:n].copy(),
        tau=memory["tau"][:n].copy(),
        kinetic_j=float(parts[0]),
        potential_j=float(parts[1]),
        stop_j=float(parts[2]),
        work_drive_j=float(memory["work_drive"]),
        work_friction_j=float(memory["work_friction"]),
        work_stop_j=float(memory["work_stop"]),
        brake_holds=int(memory["brake"]) in (BRAKE_CLOSED, BRAKE_OPENING),
        phase=PHASE_NAMES[int(memory["phase"])],
    )


def refusal_counts(memory: np.void) -> dict[str, int]:
    """Refused torque messages by reason, without the reasons that never occurred."""
    return {name: int(memory["refused"][code]) for code, name in enumerate(REFUSAL_NAMES) if memory["refused"][code]}
