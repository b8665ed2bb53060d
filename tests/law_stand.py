"""One control law called as the cycle calls it, and the planar two-joint arm in closed form to compare it with."""

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from rtctl.blocks import LAW_INPUT, LAW_MEMORY, MAX_TERMS
from rtctl.kernels.layout import MAX_JOINTS, MODEL, SCRATCH, new_block
from rtctl.laws import load_law
from tests.hand_arm import hand_arm

FloatArray = npt.NDArray[np.float64]

GAINS: dict[str, dict[str, Any]] = {  # one working table for each law; invented
    "float": {"kd_nm_s_rad": 1.5},
    "feedforward": {},
    "pd": {"kp_nm_rad": [30.0, 20.0], "kd_nm_s_rad": [7.0, 3.0]},
    "pid": {"kp_nm_rad": [30.0, 20.0], "kd_nm_s_rad": [7.0, 3.0], "ki_nm_rad_s": [40.0, 10.0], "integral_max_nm": 4.0},
    "pd_gravity": {"kp_nm_rad": [30.0, 30.0], "kd_nm_s_rad": [7.0, 3.0]},
    "feedforward_pd": {"kp_nm_rad": [30.0, 20.0], "kd_nm_s_rad": [7.0, 3.0]},
    "computed_torque": {
        "kp_1_s2": [1500.0, 14000.0],
        "kd_1_s": [77.46, 236.64],
        "ki_1_s3": [500.0, 300.0],
        "integral_max_rad_s2": 9.0,
    },
}


class LawStand:
    """A law with its blocks; the torque is the ordered sum of its terms."""

    def __init__(self, name: str, model: np.void, gains: dict[str, Any] | None = None) -> None:
        self.law = load_law(name)
        self.model = model
        self.n = int(model["n"])
        self.arm = hand_arm(model)
        self.parameters = self.law.prepare(self.arm, GAINS[name] if gains is None else gains)
        self.x, self.memory, self.ws = new_block(LAW_INPUT), new_block(LAW_MEMORY), new_block(SCRATCH)
        self.terms = np.full((MAX_TERMS, MAX_JOINTS), np.nan)
        self.x["n"], self.x["dt_s"] = self.n, 1e-3

    def set(self, **fields: Any) -> "LawStand":
        """Set fields of the law's input."""
        for name, value in fields.items():
            self.x[name][: self.n] = value
        return self

    def call(self) -> FloatArray:
        """One call; returns the torque (n,)."""
        self.terms[:] = np.nan
        assert self.law.torque(self.model, self.x, self.parameters, self.memory, self.ws, self.terms) == 1
        return np.array([self.terms[: len(self.law.terms), i].cumsum()[-1] for i in range(self.n)])

    def term(self, name: str) -> FloatArray:
        """One term of the last call (n,)."""
        return self.terms[self.law.terms.index(name), : self.n].copy()


class PlanarArm:
    """Planar two-joint arm in a vertical plane, angles from straight down, second one relative.

    Default data: a published direct-drive research arm (source kelly2005). Friction is invented.
    """

    l1, lc1, lc2 = 0.26, 0.0983, 0.0229  # m
    m1, m2 = 6.5225, 2.0458  # kg
    I1, I2 = 0.1213, 0.0116  # kg m^2 about the centres of mass
    gravity = 9.81  # m/s^2
    viscous = np.array([0.3, 0.2])  # N m s/rad
    coulomb = np.array([0.5, 0.4])  # N m
    friction_speed = 0.05  # rad/s

    def model(self) -> np.void:
        """The arm as a MODEL block: z along the axes, x along the links, gravity along base x."""
        model = new_block(MODEL)
        model["n"] = 2
        model["parent"][:2] = (-1, 0)
        model["R_parent"][:2] = np.eye(3)
        model["p_parent"][1] = (self.l1, 0.0, 0.0)
        model["mass"][:2] = (self.m1, self.m2)
        model["h"][:2, 0] = (self.m1 * self.lc1, self.m2 * self.lc2)
        for i, inertia in enumerate((self.I1 + self.m1 * self.lc1**2, self.I2 + self.m2 * self.lc2**2)):
            model["I"][i] = (0.0, 0.0, 0.0, inertia, 0.0, inertia)
        model["gravity"] = (self.gravity, 0.0, 0.0)
        model["viscous"][:2], model["coulomb"][:2], model["friction_speed"][:2] = self.viscous, self.coulomb, self.friction_speed
        return model

    def M(self, q: FloatArray) -> FloatArray:
        """Inertia matrix, kg m^2."""
        second = self.I2 + self.m2 * self.lc2**2
        coupling = self.m2 * self.l1 * self.lc2 * math.cos(q[1])
        first = self.I1 + self.m1 * self.lc1**2 + self.m2 * self.l1**2 + second + 2.0 * coupling
        return np.array([[first, second + coupling], [second + coupling, second]])

    def velocity(self, q: FloatArray, qd: FloatArray) -> FloatArray:
        """Centrifugal and Coriolis torque, N m."""
        h = self.m2 * self.l1 * self.lc2 * math.sin(q[1])
        return h * np.array([-2.0 * qd[0] * qd[1] - qd[1] ** 2, qd[0] ** 2])

    def g(self, q: FloatArray) -> FloatArray:
        """Gravity torque, N m."""
        second = self.m2 * self.lc2 * self.gravity * math.sin(q[0] + q[1])
        return np.array([(self.m1 * self.lc1 + self.m2 * self.l1) * self.gravity * math.sin(q[0]) + second, second])

    def friction(self, qd: FloatArray) -> FloatArray:
        """Friction torque of the model, N m."""
        return self.coulomb * np.tanh(qd / self.friction_speed) + self.viscous * qd
