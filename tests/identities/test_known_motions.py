"""Motions known in closed form: pendulums, a spinning body, and how fast the simulated arm's integrator approaches them."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.linalg import eigh
from scipy.special import ellipk, gamma

from rtctl import dynamics
from rtctl.kernels.layout import OK
from rtctl.plant.physics import substeps, true_energy
from tests.known_arms import (
    LONG_TWO_LINK,
    STANDARD_GRAVITY,
    Body,
    known_arm,
    rod_pendulum,
    rotation_x,
    spherical_pendulum,
)
from tests.plants import chain_model, true_arm
from tests.random_arms import RandomArm
from tests.sources import source

Array = np.ndarray

PRINTED = 2e-10  # ten digits behind the point, and rounding
EXTRAPOLATED = 2e-7  # what two steps of 1 and 1/2 ms leave of the period, relative: fourth order in the step
DIFFERENCE = 1e-9  # of central differences of a sine


class Motion:
    """The simulated arm without friction, brakes open, no torque asked for."""

    def __init__(self, model: np.void, q: list[float], qd: list[float]) -> None:
        self.n = len(q)
        self.setup, self.memory = true_arm(model)
        self.memory["q"][: self.n], self.memory["qd"][: self.n] = q, qd
        self.memory["brake"] = 2

    @property
    def q(self) -> Array:
        return self.memory["q"][: self.n].copy()

    @property
    def qd(self) -> Array:
        return self.memory["qd"][: self.n].copy()

    @property
    def energy(self) -> float:
        """Kinetic plus potential energy, J."""
        parts = np.zeros(3)
        assert true_energy(self.setup, self.memory, parts) == OK
        return float(parts.sum())

    def run(self, seconds: float, dt: float) -> "Motion":
        assert substeps(self.setup, self.memory, dt, round(seconds / dt)) == OK
        return self

    def until_zero(self, joint: int, dt: float) -> float:
        """Time of the joint's next passage through 0, where its acceleration vanishes, s."""
        side = math.copysign(1.0, self.memory["q"][joint])
        count = 0
        while side * self.memory["q"][joint] > 0.0:
            before = float(self.memory["q"][joint])
            assert substeps(self.setup, self.memory, dt, 1) == OK
            count += 1
        return (count - 1 + before / (before - float(self.memory["q"][joint]))) * dt


def period(model: np.void, amplitude_rad: float, dt: float = 1e-3) -> float:
    """Period of a pendulum let go at rest, s: four quarters, extrapolated from two steps (the integrator is of second order)."""
    coarse, fine = (Motion(model, [amplitude_rad], [0.0]).until_zero(0, h) for h in (dt, dt / 2.0))
    return 4.0 * (4.0 * fine - coarse) / 3.0


def point_pendulum(length_m: float) -> RandomArm:
    """A point mass on a rod without mass, hanging at q = 0."""
    return known_arm([Body(-1, 1.7, (length_m, 0.0, 0.0), (0.0, 0.0, 0.0))], (STANDARD_GRAVITY, 0.0, 0.0))


# ---- one pendulum ---------------------------------------------------------------------------------------------------------------


@source("abramowitz1964", "ch. 17: T / T0 = (2 / pi) K(sin(a / 2)), ten digits")
@pytest.mark.parametrize(
    ("amplitude_deg", "ratio"),
    [
        (1, 1.0000190389),
        (5, 1.0004761725),
        (10, 1.0019071881),
        (20, 1.0076690258),
        (30, 1.0174087976),
        (45, 1.0399733432),
        (60, 1.0731820071),
        (90, 1.1803405990),
        (120, 1.3728805006),
        (135, 1.5279475882),
        (150, 1.7622037295),
        (170, 2.4393627197),
        (179, 3.9010651604),
    ],
)
def test_period_of_a_swing(amplitude_deg: float, ratio: float) -> None:
    """From a degree to nearly upright, a rod's period is T0 = 2 pi sqrt(2 L / 3 g) = 1.63822632734 s for 1 m, times the ratio."""
    found = period(rod_pendulum(2.0, 1.0).model, math.radians(amplitude_deg))
    assert found / 1.63822632734 == pytest.approx(ratio, rel=EXTRAPOLATED)
    assert ratio == pytest.approx(2.0 / math.pi * ellipk(math.sin(math.radians(amplitude_deg) / 2.0) ** 2), abs=PRINTED)


@source("abramowitz1964", "17.3.9 and lemniscate case K(1/2) = Gamma(1/4)^2 / (4 sqrt(pi)) = 1.85407467730137")
def test_point_mass_let_go_level() -> None:
    """A point mass on 1 m swings from level to level in 4 sqrt(L / g) K(1/2) = 2.36824634629 s."""
    lemniscate = gamma(0.25) ** 2 / (4.0 * math.sqrt(math.pi))
    assert lemniscate == pytest.approx(1.85407467730137, rel=1e-14)
    assert 4.0 * math.sqrt(1.0 / STANDARD_GRAVITY) * lemniscate == pytest.approx(2.36824634629, rel=1e-11)
    assert period(point_pendulum(1.0).model, math.pi / 2.0) == pytest.approx(2.36824634629, rel=EXTRAPOLATED)


@source("textbook mechanics", "small swings, T0 = 2 pi sqrt(L / g), and the series 1 + a^2/16 + 11 a^4/3072 (from memory)")
def test_small_swings_of_a_point_mass() -> None:
    """T0 = 2.00640929259 s for 1 m; the amplitude of 0.1 rad adds a^2/16 and 11 a^4/3072 of it."""
    expected = 2.00640929259 * (1.0 + 0.1**2 / 16.0 + 11.0 * 0.1**4 / 3072.0)
    assert period(point_pendulum(1.0).model, 0.1) == pytest.approx(expected, rel=EXTRAPOLATED)


@source("textbook mechanics", "energy: all height becomes speed, sqrt(2 g / L) for a point mass")
def test_speed_of_a_point_mass_at_the_bottom() -> None:
    """Let go level on 1 m, it passes the bottom at 4.4286905514 rad/s."""
    motion = Motion(point_pendulum(1.0).model, [math.pi / 2.0], [0.0])
    motion.until_zero(0, 1e-4)
    assert motion.qd[0] == pytest.approx(-4.4286905514, rel=1e-7)


# ---- two pendulums --------------------------------------------------------------------------------------------------------------


def double_points(length_m: float) -> RandomArm:
    """Two equal point masses on two equal rods without mass, hanging at q = 0; the second angle is relative."""
    point = {"mass": 1.3, "centre": (length_m, 0.0, 0.0), "I_centre": (0.0, 0.0, 0.0)}
    return known_arm([Body(-1, **point), Body(0, **point, p=(length_m, 0.0, 0.0))], (STANDARD_GRAVITY, 0.0, 0.0))


def modes(arm: RandomArm) -> tuple[Array, Array]:
    """Angular frequencies, rad/s, and shapes (columns) of small oscillations about q = 0: stiffness from the gravity torque."""
    step = 1e-3
    columns = []
    for e in np.eye(arm.n):
        one, two = dynamics.gravity_torque(arm, step * e), dynamics.gravity_torque(arm, 2.0 * step * e)
        columns.append((8.0 * one - two) / (6.0 * step))  # odd in q: the fourth-order central difference needs one side
    squares, shapes = eigh(np.array(columns).T, dynamics.inertia_matrix(arm, np.zeros(arm.n)))
    return np.sqrt(squares), shapes


@source("landau1976", "par. 23: equal masses and lengths, w^2 = (2 -+ sqrt 2) g / L, outer angle +-sqrt 2 of the inner one")
def test_modes_of_a_double_pendulum() -> None:
    """Frequencies 0.76536686473 and 1.84775906502 of sqrt(g / L), and the shapes in absolute angles."""
    w, shapes = modes(double_points(0.6))
    assert w / math.sqrt(STANDARD_GRAVITY / 0.6) == pytest.approx([0.76536686473, 1.84775906502], abs=DIFFERENCE)
    absolute = np.cumsum(shapes, axis=0)
    assert absolute[1] / absolute[0] == pytest.approx([math.sqrt(2.0), -math.sqrt(2.0)], rel=DIFFERENCE)


@source("textbook mechanics", "two equal uniform rods, w^2 = (3 -+ 6 / sqrt 7) g / L (from memory)")
def test_modes_of_two_rods() -> None:
    """The squares of the frequencies are 0.7322131619 and 5.2677868380 g / L."""
    model = chain_model(2, length_m=0.4)
    w, _ = modes(RandomArm(2, model, ()))
    assert w**2 * 0.4 / STANDARD_GRAVITY == pytest.approx([0.7322131619, 5.2677868380], abs=DIFFERENCE)


@source("landau1976", "par. 23: a normal mode swings alone")
@pytest.mark.parametrize(("factor", "outer"), [(0.76536686473, math.sqrt(2.0)), (1.84775906502, -math.sqrt(2.0))])
def test_a_mode_swings_alone(factor: float, outer: float) -> None:
    """Let go in the shape of a mode, both joints pass zero together after a quarter of its period."""
    amplitude = 1e-4  # rad: the period grows by about its square
    quarter_s = math.pi / 2.0 / (factor * math.sqrt(STANDARD_GRAVITY / 0.6))
    for joint in range(2):
        motion = Motion(double_points(0.6).model, [amplitude, amplitude * (outer - 1.0)], [0.0, 0.0])
        assert motion.until_zero(joint, 1e-4) == pytest.approx(quarter_s, rel=1e-7)


@source("textbook mechanics", "conical pendulum: w = sqrt(g / (L cos theta))")
@pytest.mark.parametrize(("theta_deg", "w"), [(30.0, 3.36507712166), (60.0, 4.42869055139)])
def test_conical_pendulum_keeps_its_cone(theta_deg: float, w: float) -> None:
    """At the right speed it circles 20 times at the same angle, in the right time; 1 % faster it leaves the cone."""
    theta = math.radians(theta_deg)
    turns_s = 20 * 2.0 * math.pi / w
    dt = turns_s / 80_000
    motion = Motion(spherical_pendulum(1.3, 1.0).model, [0.0, theta], [w, 0.0]).run(turns_s, dt)
    # The step shifts the balance by (w dt)^2 of it; 20 turns add up.
    assert motion.q == pytest.approx([20 * 2.0 * math.pi, theta], abs=1e-5)
    faster = Motion(spherical_pendulum(1.3, 1.0).model, [0.0, theta], [1.01 * w, 0.0]).run(0.5 * math.pi / w, dt)
    assert faster.q[1] > theta + 0.005


# ---- a spinning body ------------------------------------------------------------------------------------------------------------

ALONG_X = ((0.0, 0.0, 1.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0))  # z of the child along x of the parent


def gimbals(moments: tuple[float, float, float]) -> RandomArm:
    """A body free to turn: three crossing axes, rings without mass; its principal axes are x, y, z of body 3."""
    ring = {"mass": 0.0, "centre": (0.0, 0.0, 0.0), "I_centre": (0.0, 0.0, 0.0)}
    spinner = Body(1, 2.0, (0.0, 0.0, 0.0), moments, R=ALONG_X)
    return known_arm([Body(-1, **ring), Body(0, **ring, R=rotation_x(-math.pi / 2.0)), spinner], (0.0, 0.0, 0.0))


def body_rates(arm: RandomArm, q: Array, qd: Array) -> tuple[Array, Array]:
    """Angular velocity in body coordinates, rad/s, and the body's rotation matrix."""
    R = dynamics.frame_pose(arm, "tip", q)[:3, :3]
    return R.T @ (dynamics.jacobian(arm, "tip", q)[3:] @ qd), R


def spinning(arm: RandomArm, w: tuple[float, float, float]) -> Motion:
    """The body at q = 0 with this angular velocity in its own coordinates."""
    start = np.zeros(3)
    R = dynamics.frame_pose(arm, "tip", start)[:3, :3]
    qd = np.linalg.solve(dynamics.jacobian(arm, "tip", start)[3:], R @ w)
    return Motion(arm.model, list(start), list(qd))


@source("textbook mechanics", "Euler: a body without torque keeps its energy and its angular momentum")
def test_torque_free_rotation_keeps_energy_and_momentum() -> None:
    """All three components of R I w and the energy stay, and what the step spoils falls by four when it is halved."""
    moments = (1.0, 2.0, 2.6)
    arm = gimbals(moments)
    errors = []
    for dt in (1e-3, 5e-4):
        motion = spinning(arm, (0.5, -0.4, 1.1))
        w, R = body_rates(arm, motion.q, motion.qd)
        momentum, energy = R @ (np.array(moments) * w), motion.energy
        assert energy == pytest.approx(0.5 * np.sum(np.array(moments) * w**2), rel=1e-14)
        motion.run(1.0, dt)
        w, R = body_rates(arm, motion.q, motion.qd)
        errors.append(np.append(np.abs(R @ (np.array(moments) * w) - momentum).max(), abs(motion.energy - energy)))
    assert np.all(errors[1] < 1e-6)
    assert errors[0] / errors[1] == pytest.approx([4.0, 4.0], rel=0.05)


@source("textbook mechanics", "Euler: symmetric body, precession in body axes at (I3 - I1) / I1 w3")
def test_free_precession_of_a_symmetric_body() -> None:
    """Moments 1, 1, 1.6 kg m^2 and 2 rad/s of spin: the rest of the angular velocity turns at 1.2 rad/s in the body, unchanged."""
    arm = gimbals((1.0, 1.0, 1.6))
    motion = spinning(arm, (0.2, 0.0, 2.0)).run(1.5, 2e-4)
    w, _ = body_rates(arm, motion.q, motion.qd)
    assert w == pytest.approx([0.2 * math.cos(1.2 * 1.5), 0.2 * math.sin(1.2 * 1.5), 2.0], abs=1e-6)


@source("textbook mechanics", "Euler: rotation about the intermediate axis grows at w sqrt((I2-I1)(I3-I2)/(I1 I3)) (from memory)")
def test_intermediate_axis_is_unstable() -> None:
    """Moments 1, 2, 3 kg m^2: a disturbance d grows as d cosh(0.577350 w t) about the middle axis, and only swings about others."""
    w, disturbance, time_s = 2.0, 1e-6, 4.0
    arm = gimbals((1.0, 3.0, 2.0))
    motion = spinning(arm, (disturbance, 0.0, w)).run(time_s, 1e-3)
    grown = body_rates(arm, motion.q, motion.qd)[0][0]
    assert grown / disturbance == pytest.approx(math.cosh(0.577350 * w * time_s), rel=1e-4)
    for moments in ((2.0, 3.0, 1.0), (1.0, 2.0, 3.0)):
        arm = gimbals(moments)
        motion = spinning(arm, (disturbance, 0.0, w)).run(time_s, 1e-3)
        assert np.abs(body_rates(arm, motion.q, motion.qd)[0][:2]).max() < 2.0 * disturbance


# ---- the integrator --------------------------------------------------------------------------------------------------------------


@source("scipy", "solve_ivp, DOP853, on the textbook's equations of the planar two-link arm")
def test_measured_order_of_the_integrator() -> None:
    """A swinging two-link arm comes to the pose of an independent solution with the square of the step: order 2 within 2 %."""

    def textbook(_: float, state: Array) -> Array:
        q, qd = state[:2], state[2:]
        tau = LONG_TWO_LINK.coriolis_torque(q, qd) + LONG_TWO_LINK.gravity_torque(q)
        return np.concatenate([qd, np.linalg.solve(LONG_TWO_LINK.inertia_matrix(q), -tau)])

    start = [1.2, -0.7, 0.5, 1.0]
    exact = solve_ivp(textbook, (0.0, 1.0), start, "DOP853", rtol=1e-12, atol=1e-13).y[:, -1]
    errors = []
    for dt in (2e-3, 1e-3, 5e-4, 2.5e-4):
        motion = Motion(LONG_TWO_LINK.arm.model, start[:2], start[2:]).run(1.0, dt)
        errors.append(np.abs(np.concatenate([motion.q, motion.qd]) - exact).max())
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    print("integrator: errors after 1 s", errors, "orders", orders)
    assert orders == pytest.approx([2.0, 2.0, 2.0], rel=0.02)


def drift_per_hour(dt: float, seconds: float) -> float:
    """Slope of the energy of a double pendulum in wide swings, as a share of the swing's energy per simulated hour."""
    motion = Motion(chain_model(2), [1.0, 0.5], [0.0, 0.0])
    start = motion.energy
    swing = start - Motion(chain_model(2), [0.0, 0.0], [0.0, 0.0]).energy
    samples = [motion.run(seconds / 1000.0, dt).energy - start for _ in range(1000)]
    means = np.mean(np.reshape(samples, (10, 100)), axis=1)
    return float(np.polyfit(np.arange(10) * seconds / 10.0, means, 1)[0] * 3600.0 / swing)


def test_energy_drift_per_hour() -> None:
    """The drift per simulated hour is printed: below 1 % at the longest substep allowed, below 0.03 % at a quarter of it.

    It comes from the velocity-dependent torques, which are found by a fixed number of corrections, and falls faster than the
    square of the step. Measured on six and on three minutes.
    """
    longest, quarter = drift_per_hour(1e-3, 360.0), drift_per_hour(2.5e-4, 180.0)
    print(f"energy drift, share of the swing per simulated hour: {longest:+.1e} at 1 ms, {quarter:+.1e} at 0.25 ms")
    assert abs(longest) < 1e-2
    assert abs(quarter) < 3e-4
