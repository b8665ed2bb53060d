"""A published direct-drive arm (source kelly2005): its bounds from our kernels, and its published gains on the simulated arm."""

import math

import numpy as np
import pytest

from rtctl import dynamics
from tests.known_arms import DIRECT_DRIVE
from tests.law_loop import LawLoop
from tests.law_stand import LawStand
from tests.sources import source

FOUR_DIGITS = 5e-5  # half of the last printed digit
SIX_DIGITS = 5e-7
TWO_DECIMALS = 5e-3
# All poses, joint 2 in steps of one degree, so that the extremes at 0, 90 and 180 degrees are among them.
Q2 = np.radians(np.arange(-180.0, 181.0))
STEP = 1e-3  # of central differences of fourth order: truncation 1e-13
TARGET = (math.pi / 10, math.pi / 30)  # rad, of the published experiments


def derivative(values: list[np.ndarray]) -> np.ndarray:
    """Fourth-order central difference from values at -2, -1, 1 and 2 steps."""
    far_below, below, above, far_above = values
    return (8.0 * (above - below) - (far_above - far_below)) / (12.0 * STEP)


def velocity_symbols(q2: float) -> np.ndarray:
    """Symbols c[k, i, j] with torque k = sum c[k, i, j] qd_i qd_j, symmetric in i and j, read from the bias torque."""
    q, unit = (0.0, q2), np.eye(2)
    gravity = dynamics.gravity_torque(DIRECT_DRIVE.arm, q)
    one, two, both = (dynamics.bias_torque(DIRECT_DRIVE.arm, q, qd) - gravity for qd in (unit[0], unit[1], unit[0] + unit[1]))
    c = np.zeros((2, 2, 2))
    c[:, 0, 0], c[:, 1, 1] = one, two
    c[:, 0, 1] = c[:, 1, 0] = 0.5 * (both - one - two)
    return c


@source("kelly2005", "table 5.3: k_M = n^2 max |dM_ij / dq_k| = 0.0974 kg m^2 (from memory)")
def test_bound_of_the_inertia_matrix_rate() -> None:
    """Four times the steepest element of M over all poses."""
    steps = (-2.0, -1.0, 1.0, 2.0)
    rates = [derivative([dynamics.inertia_matrix(DIRECT_DRIVE.arm, (0.3, q2 + k * STEP)) for k in steps]) for q2 in Q2]
    assert 4.0 * np.abs(rates).max() == pytest.approx(0.0974455, abs=SIX_DIGITS)
    assert 4.0 * np.abs(rates).max() == pytest.approx(0.0974, abs=FOUR_DIGITS)


@source("kelly2005", "table 5.3: k_C1 = n^2 max |C_kij| = 0.0487, k_C2 = n^3 max |dC_kij / dq_l| = 0.0974 kg m^2 (from memory)")
def test_bounds_of_the_velocity_torques() -> None:
    """Four times the largest symbol, and eight times its steepest change, over all poses."""
    symbols = [velocity_symbols(q2) for q2 in Q2]
    assert 4.0 * np.abs(symbols).max() == pytest.approx(0.0487228, abs=SIX_DIGITS)
    assert 4.0 * np.abs(symbols).max() == pytest.approx(0.0487, abs=FOUR_DIGITS)
    rates = [derivative([velocity_symbols(q2 + k * STEP) for k in (-2.0, -1.0, 1.0, 2.0)]) for q2 in Q2[::30]]
    assert 8.0 * np.abs(rates).max() == pytest.approx(0.0974455, abs=SIX_DIGITS)


@source("kelly2005", "table 5.3: k_g = n max |dg_i / dq_j| = 23.94 N m/rad, below the least position gain of 30 (from memory)")
def test_bound_of_the_gravity_stiffness() -> None:
    """Twice the steepest gravity torque, at the arm hanging or standing; the published gain of 30 N m/rad exceeds it."""
    rates = []
    for q1 in np.radians(np.arange(0.0, 360.0, 30.0)):
        for q2 in np.radians(np.arange(0.0, 360.0, 30.0)):
            for e in STEP * np.eye(2):
                values = [dynamics.gravity_torque(DIRECT_DRIVE.arm, np.array([q1, q2]) + k * e) for k in (-2.0, -1.0, 1.0, 2.0)]
                rates.append(np.abs(derivative(values)).max())
    assert 2.0 * max(rates) == pytest.approx(23.9348, abs=FOUR_DIGITS)
    assert 2.0 * max(rates) == pytest.approx(23.94, abs=2 * TWO_DECIMALS)  # printed rounded up: it is a bound
    assert 30.0 > 2.0 * max(rates)


@source("kelly2005", "ch. 5, parameters of table 5.1: eigenvalues of M from 0.010902 to 0.361428 kg m^2, computed; bound 0.7193")
def test_range_of_the_eigenvalues() -> None:
    """The least and the largest eigenvalue of M over all poses, and the determinant stays positive."""
    matrices = [dynamics.inertia_matrix(DIRECT_DRIVE.arm, (0.3, q2)) for q2 in Q2]
    values = np.linalg.eigvalsh(matrices)
    assert values.min() == pytest.approx(0.010902, abs=SIX_DIGITS)
    assert values.max() == pytest.approx(0.361428, abs=SIX_DIGITS)
    assert values.max() < 0.7193
    assert np.linalg.det(matrices).min() > 0.0


@source("kelly2005", "computed-torque experiment: Kp 1500 and 14000 1/s^2 with Kv 77.46 and 236.64 1/s, twice the roots")
def test_published_gains_are_critically_damped() -> None:
    """A natural frequency of sqrt(Kp) at damping ratio 1 gives the published damping gains."""
    w = [math.sqrt(1500.0), math.sqrt(14000.0)]
    gains = {"natural_frequency_rad_s": w, "damping_ratio": 1.0}
    parameters = LawStand("computed_torque", DIRECT_DRIVE.arm.model, gains).parameters
    assert parameters["Kp"][:2] == pytest.approx([1500.0, 14000.0], rel=1e-12)
    assert parameters["Kd"][:2] == pytest.approx([77.46, 236.64], abs=TWO_DECIMALS)


PUBLISHED_PD = {"kp_nm_rad": [30.0, 30.0], "kd_nm_s_rad": [7.0, 3.0]}


@source("takegaki-arimoto1981", "gravity compensation leaves no error; gains and target of the experiment in kelly2005")
def test_pd_with_gravity_reaches_the_published_target() -> None:
    """Let go hanging, the arm ends at (pi/10, pi/30) with the published gains."""
    loop = LawLoop("pd_gravity", DIRECT_DRIVE.arm.model, PUBLISHED_PD, q_ref=TARGET)
    loop.run(4000)
    assert loop.q == pytest.approx(TARGET, abs=1e-6)


@source("takegaki-arimoto1981", "without gravity compensation Kp e = g(q) remains; closed form of g from kelly2005")
def test_pd_alone_leaves_gravity_over_stiffness() -> None:
    """The same gains without gravity end where 30 (q_ref - q) is the closed-form gravity torque, well short of the target."""
    loop = LawLoop("pd", DIRECT_DRIVE.arm.model, PUBLISHED_PD, q_ref=TARGET)
    loop.run(4000)
    assert 30.0 * (np.array(TARGET) - loop.q) == pytest.approx(DIRECT_DRIVE.gravity_torque(loop.q), abs=1e-5)
    assert TARGET[0] - loop.q[0] > 0.08


@source("kelly2005", "computed-torque gains 1500, 14000 1/s^2, critically damped: error (1 + w t) e^(-w t) of each joint")
def test_computed_torque_with_the_published_gains() -> None:
    """From the hanging pose to the target each joint's error follows its own second-order decay, whatever the other does."""
    gains = {"kp_1_s2": [1500.0, 14000.0], "kd_1_s": [2.0 * math.sqrt(1500.0), 2.0 * math.sqrt(14000.0)]}
    loop = LawLoop("computed_torque", DIRECT_DRIVE.arm.model, gains, q_ref=TARGET, period_s=1e-4)
    errors = loop.run(800) / np.array(TARGET)
    t = np.arange(800)[:, None] * 1e-4
    x = np.sqrt([1500.0, 14000.0]) * t
    # The torque is held over a period: a delay of half of it, first order in w T = 0.004 and 0.012.
    assert np.abs(errors - (1.0 + x) * np.exp(-x)).max(axis=0) == pytest.approx([0.0, 0.0], abs=0.006)
    assert np.abs(errors[:, 0] - ((1.0 + x) * np.exp(-x))[:, 0]).max() < 0.002
