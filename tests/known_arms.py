"""Arms with closed-form equations, filled directly into model blocks: planar two-link, pendulums, and a published six-joint arm."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from rtctl.kernels.layout import MODEL, REVOLUTE, new_block
from tests.random_arms import RandomArm, fill_body

Array = NDArray[np.float64]

STANDARD_GRAVITY = 9.80665  # m/s^2, exact by definition


@dataclass(frozen=True)
class Body:
    """One moving body: pose of its frame in the parent at q = 0, and its inertia about the centre of mass."""

    parent: int
    mass: float
    centre: ArrayLike
    I_centre: ArrayLike
    p: ArrayLike = (0.0, 0.0, 0.0)
    R: ArrayLike = ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0))
    kind: int = REVOLUTE
    rotor: float = 0.0


def known_arm(bodies: list[Body], gravity: ArrayLike, tip: ArrayLike = (0.0, 0.0, 0.0)) -> RandomArm:
    """An arm of the given bodies with one frame, `tip`, fixed to the last body."""
    model = new_block(MODEL)
    model["n"] = len(bodies)
    model["gravity"] = gravity
    for i, body in enumerate(bodies):
        model["parent"][i], model["kind"][i], model["rotor"][i] = body.parent, body.kind, body.rotor
        model["R_parent"][i], model["p_parent"][i] = body.R, body.p
        I_centre = np.asarray(body.I_centre, dtype=np.float64)
        fill_body(model, i, body.mass, np.asarray(body.centre), np.diag(I_centre) if I_centre.ndim == 1 else I_centre)
    model["frame_count"] = 1
    model["frame_body"][0] = len(bodies) - 1
    model["R_body_frame"][0] = np.eye(3)
    model["p_body_frame"][0] = tip
    return RandomArm(len(bodies), model, ("tip",))


def rotation_x(angle_rad: float) -> Array:
    c, s = math.cos(angle_rad), math.sin(angle_rad)
    return np.array([[1.0, 0.0, 0.0], [0.0, c, -s], [0.0, s, c]])


@dataclass(frozen=True)
class TwoLink:
    """A planar two-link arm in a vertical plane, q[0] from straight down, q[1] relative; its textbook equations beside it."""

    l1: float
    l2: float
    lc1: float
    lc2: float
    m1: float
    m2: float
    I1: float
    I2: float
    g: float
    rotor: tuple[float, float] = (0.0, 0.0)

    @property
    def arm(self) -> RandomArm:
        """Joint axes along z of the base; x of the base points down."""
        first = Body(-1, self.m1, (self.lc1, 0.0, 0.0), (0.0, self.I1, self.I1), rotor=self.rotor[0])
        second = Body(0, self.m2, (self.lc2, 0.0, 0.0), (0.0, self.I2, self.I2), p=(self.l1, 0.0, 0.0), rotor=self.rotor[1])
        return known_arm([first, second], (self.g, 0.0, 0.0), tip=(self.l2, 0.0, 0.0))

    def inertia_matrix(self, q: ArrayLike) -> Array:
        c = math.cos(np.asarray(q)[1])
        M12 = self.I2 + self.m2 * (self.lc2**2 + self.l1 * self.lc2 * c)
        M22 = self.I2 + self.m2 * self.lc2**2
        M11 = self.I1 + self.I2 + self.m1 * self.lc1**2
        M11 += self.m2 * (self.l1**2 + self.lc2**2 + 2.0 * self.l1 * self.lc2 * c)
        return np.array([[M11 + self.rotor[0], M12], [M12, M22 + self.rotor[1]]])

    def coriolis_torque(self, q: ArrayLike, qd: ArrayLike) -> Array:
        h = self.m2 * self.l1 * self.lc2 * math.sin(np.asarray(q)[1])
        w1, w2 = np.asarray(qd)
        return h * np.array([-2.0 * w1 * w2 - w2**2, w1**2])

    def gravity_torque(self, q: ArrayLike) -> Array:
        q1, q2 = np.asarray(q)
        outer = self.m2 * self.lc2 * self.g * math.sin(q1 + q2)
        return np.array([(self.m1 * self.lc1 + self.m2 * self.l1) * self.g * math.sin(q1) + outer, outer])


# A published direct-drive arm (source kelly2005, table 5.1).
DIRECT_DRIVE = TwoLink(0.26, 0.26, 0.0983, 0.0229, 6.5225, 2.0458, 0.1213, 0.0116, 9.81)
# Invented: long outer link, rotor inertia.
LONG_TWO_LINK = TwoLink(0.4, 0.7, 0.15, 0.33, 3.1, 2.4, 0.05, 0.11, STANDARD_GRAVITY, rotor=(0.3, 0.02))


def rod_pendulum(mass_kg: float, length_m: float) -> RandomArm:
    """A uniform rod that turns about one end, hanging down at q = 0 (x of the base points down)."""
    I_centre = mass_kg * length_m**2 / 12.0
    rod = Body(-1, mass_kg, (length_m / 2.0, 0.0, 0.0), (0.0, I_centre, I_centre))
    return known_arm([rod], (STANDARD_GRAVITY, 0.0, 0.0), tip=(length_m, 0.0, 0.0))


def spherical_pendulum(mass_kg: float, length_m: float) -> RandomArm:
    """A point mass on a rod: q[0] turns about the vertical, q[1] swings about a level axis, down at q = 0 (z of the base is up)."""
    ring = Body(-1, 0.0001, (0.0, 0.0, 0.0), (1e-9, 1e-9, 1e-9))
    point = Body(0, mass_kg, (0.0, -length_m, 0.0), (0.0, 0.0, 0.0), R=rotation_x(math.pi / 2.0))
    return known_arm([ring, point], (0.0, 0.0, -STANDARD_GRAVITY), tip=(0.0, -length_m, 0.0))


def turntable_slider(mass_kg: float, rotor: tuple[float, float] = (0.0, 0.0)) -> RandomArm:
    """A point mass on a radial slider that turns in a level plane: plane polar coordinates (q[0] angle, q[1] radius)."""
    along_x = ((0.0, 0.0, 1.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0))  # z of the slider along x of the table
    table = Body(-1, 0.0001, (0.0, 0.0, 0.0), (0.0, 0.0, 0.0), rotor=rotor[0])
    point = Body(0, mass_kg, (0.0, 0.0, 0.0), (0.0, 0.0, 0.0), R=along_x, kind=1, rotor=rotor[1])
    return known_arm([table, point], (0.0, 0.0, -STANDARD_GRAVITY))


def arm6_1986() -> RandomArm:
    """A measured six-joint research arm (source arm6_1986): kinematics of table A1, link data of tables 4 to 6, from memory."""
    alpha = np.radians([0.0, -90.0, 0.0, 90.0, -90.0, 90.0])
    a = (0.0, 0.0, 0.4318, -0.0203, 0.0, 0.0)
    d = (0.0, 0.2435, -0.0934, 0.4331, 0.0, 0.0)
    mass = (0.0, 17.40, 4.80, 0.82, 0.34, 0.09)
    centre = ((0, 0, 0), (0.068, 0.006, -0.016), (0, -0.070, 0.014), (0, 0, -0.019), (0, 0, 0), (0, 0, 0.032))
    I_centre = (
        (0, 0, 0.35),
        (0.130, 0.524, 0.539),
        (0.066, 0.0125, 0.086),
        (1.8e-3, 1.8e-3, 1.3e-3),
        (0.30e-3, 0.30e-3, 0.40e-3),
        (0.15e-3, 0.15e-3, 0.04e-3),
    )
    rotor = (1.14, 4.71, 0.827, 0.200, 0.179, 0.193)
    bodies = []
    for i in range(6):
        R = rotation_x(alpha[i])
        p = np.array([a[i], 0.0, 0.0]) + R @ (0.0, 0.0, d[i])
        bodies.append(Body(i - 1, mass[i], centre[i], I_centre[i], p=p, R=R, rotor=rotor[i]))
    return known_arm(bodies, (0.0, 0.0, -9.81))
