"""How many combinations of inertial parameters act on an arm: the rank of the torques as a linear function of them.

The inverse dynamics is linear in the ten parameters of each body (mass, first moments, inertia about its frame) and in the rotor
inertias. One kernel call per unit parameter gives a column; the counts are known for whole classes of arms.
"""

import math

import numpy as np
import pytest

from rtctl import dynamics
from rtctl.kernels.layout import MODEL, new_block
from tests.known_arms import STANDARD_GRAVITY, Body, arm6_1986, known_arm, rotation_x
from tests.random_arms import RandomArm, random_arm
from tests.sources import source

Array = np.ndarray

VERTICAL, OBLIQUE = (0.0, 0.0, -STANDARD_GRAVITY), (3.0, -4.0, -8.0)  # along the first axis, and not
STATES = 24  # more rows than columns for every arm
GAP = 1e-8  # of the largest singular value: those of the rank are above 1e-3, the others below 1e-14
PARAMETERS = (("mass", None), *(("h", k) for k in range(3)), *(("I", k) for k in range(6)))


def regressor(arm: RandomArm, gravity: tuple[float, float, float], rotors: bool = False) -> Array:
    """Torques of random motions for each parameter at 1 and all others at 0: (STATES n, 10 n or 11 n)."""
    rng = np.random.default_rng(6)
    states = [(rng.uniform(-3.0, 3.0, arm.n), rng.normal(size=arm.n), rng.normal(size=arm.n)) for _ in range(STATES)]
    columns = []
    for body in range(arm.n):
        for name, element in PARAMETERS + ((("rotor", None),) if rotors else ()):
            unit = new_block(MODEL)
            for field in ("n", "parent", "kind", "R_parent", "p_parent"):
                unit[field] = arm.model[field]
            unit["gravity"] = gravity
            if element is None:
                unit[name][body] = 1.0
            else:
                unit[name][body, element] = 1.0
            alone = RandomArm(arm.n, unit, ())
            columns.append(np.concatenate([dynamics.inverse_dynamics(alone, *state) for state in states]))
    return np.array(columns).T


def count(columns: Array) -> int:
    """Rank by singular values of the columns scaled to length 1, with a gap around the threshold that leaves no doubt."""
    lengths = np.linalg.norm(columns, axis=0)
    values = np.linalg.svd(columns[:, lengths > GAP] / lengths[lengths > GAP], compute_uv=False)
    share = values / values[0]
    assert not ((1e-12 < share) & (share < 1e-5)).any(), share
    return int((share > GAP).sum())


def spherical_wrist_seven(elbow_m: float) -> RandomArm:
    """Seven axes, up, level, up, ... with a wrist of three meeting ones; `elbow_m` sets the elbow off. Invented."""
    quarter = math.pi / 2.0
    places = [(0.0, 0.0, 0.3), (0.0, 0.0, 0.0), (0.0, -0.4, 0.0), (elbow_m, 0.0, 0.0), (-elbow_m, 0.39, 0.0), (0.0, 0.0, 0.0)]
    angles = [0.0, -quarter, quarter, quarter, -quarter, quarter]
    places.append((0.0, 0.0, 0.0))
    angles.append(-quarter)
    shell = {"mass": 1.0, "centre": (0.0, 0.0, 0.0), "I_centre": (1.0, 1.0, 1.0)}
    bodies = [Body(i - 1, p=p, R=rotation_x(angle), **shell) for i, (p, angle) in enumerate(zip(places, angles, strict=True))]
    return known_arm(bodies, VERTICAL)


def planar(n: int) -> RandomArm:
    """Parallel axes along z of the base."""
    shell = {"mass": 1.0, "centre": (0.0, 0.0, 0.0), "I_centre": (1.0, 1.0, 1.0)}
    return known_arm([Body(i - 1, p=(0.3 if i else 0.0, 0.0, 0.0), **shell) for i in range(n)], VERTICAL)


def turned_up(seed: int, n: int) -> RandomArm:
    """A random chain of turning joints whose first axis is z of the base."""
    arm = random_arm(seed, n=n, chain=True)
    arm.model["kind"][:n] = 0
    arm.model["R_parent"][0] = np.eye(3)
    return arm


ON_AXIS = [k for k in range(20) if k % 10 not in (2, 3)]  # of a planar arm, without first moments across the links
ACROSS = (STANDARD_GRAVITY, 0.0, 0.0)  # gravity in the plane of a planar arm


@source("mayeda1990", "7 n - 4 base parameters of a serial arm of turning joints, 7 n - 6 when gravity is along the first axis")
@pytest.mark.parametrize("seed", range(4))
def test_general_arms(seed: int) -> None:
    """Random serial arms of 4 to 7 joints."""
    n = 4 + seed
    arm = turned_up(seed, n)
    assert count(regressor(arm, OBLIQUE)) == 7 * n - 4
    assert count(regressor(arm, VERTICAL)) == 7 * n - 6


@source("mayeda1990", "7 n - 6 = 36 and 7 n - 4 = 38; kinematics from arm6_1986; columns that act and rotors counted numerically")
def test_six_joint_arm_of_1986() -> None:
    """36 with gravity along the first axis, where 51 of the 60 parameters act, 38 oblique, and 40 with a rotor at each joint."""
    arm = arm6_1986()
    columns = regressor(arm, VERTICAL)
    assert count(columns) == 36
    assert int((np.linalg.norm(columns, axis=0) > GAP).sum()) == 51
    assert count(regressor(arm, OBLIQUE)) == 38
    assert count(regressor(arm, VERTICAL, rotors=True)) == 40


@source("mayeda1990", "7 n - 6 = 43; with rotors counted numerically")
@pytest.mark.parametrize("elbow_m", [0.0, 0.08])
def test_seven_joints_with_a_spherical_wrist(elbow_m: float) -> None:
    """43 with the elbow in line or set off, and 48 with a rotor at each joint."""
    arm = spherical_wrist_seven(elbow_m)
    assert count(regressor(arm, VERTICAL)) == 43
    assert count(regressor(arm, VERTICAL, rotors=True)) == 48


@source("gautier-khalil1990", "planar arms; counted numerically, and by hand for two links in the docstring")
def test_planar_arms() -> None:
    """Two links upright: 6 of the 7 parameters that act, 4 with the mass centres on the links; flat: 4 of 5, and 3. Three: 9 of 11.

    By hand upright: I1 + m2 l1^2, I2, both first moments of body 2, and those of body 1 with m2 l1 added along the link.
    """
    two = planar(2)
    upright, flat = regressor(two, ACROSS), regressor(two, VERTICAL)
    acting = [int((np.linalg.norm(columns, axis=0) > GAP).sum()) for columns in (upright, flat)]
    assert acting == [7, 5]
    assert (count(upright), count(upright[:, ON_AXIS])) == (6, 4)
    assert (count(flat), count(flat[:, ON_AXIS])) == (4, 3)
    assert count(regressor(two, ACROSS, rotors=True)) == 7
    three = regressor(planar(3), ACROSS)
    assert int((np.linalg.norm(three, axis=0) > GAP).sum()) == 11
    assert count(three) == 9


def test_torques_are_the_sum_over_the_parameters() -> None:
    """The columns times a random arm's own parameters give its torques: the torques are linear in them, and nothing is left out."""
    arm = turned_up(5, 6)
    model = arm.model
    gravity = tuple(float(g) for g in model["gravity"])
    own = [np.concatenate([[model["mass"][i]], model["h"][i], model["I"][i], [model["rotor"][i]]]) for i in range(6)]
    rng = np.random.default_rng(6)
    states = [(rng.uniform(-3.0, 3.0, 6), rng.normal(size=6), rng.normal(size=6)) for _ in range(STATES)]
    tau = np.concatenate([dynamics.inverse_dynamics(arm, *state) for state in states])
    columns = regressor(arm, (gravity[0], gravity[1], gravity[2]), rotors=True)
    assert columns @ np.concatenate(own) == pytest.approx(tau, rel=1e-11, abs=1e-11)
