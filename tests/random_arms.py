"""Random arms from a seed: trees of 1 to 10 joints with branches, sliding joints, rotor inertia, friction, frames, oblique gravity.

Invented data. The model blocks are filled directly, so that the kernels are tested without the code that reads arm files.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.layout import MODEL, PRISMATIC, REVOLUTE, new_block

Array = NDArray[np.float64]

SEEDS = tuple(range(72))


@dataclass(frozen=True)
class RandomArm:
    """What the plain functions need of an arm."""

    n: int
    model: np.void
    frames: tuple[str, ...]


def random_rotation(rng: np.random.Generator) -> Array:
    """A rotation matrix, uniformly distributed (orthogonal factor of a matrix of normal numbers, signs fixed)."""
    Q, upper = np.linalg.qr(rng.normal(size=(3, 3)))
    Q = Q * np.sign(np.diag(upper))
    if np.linalg.det(Q) < 0.0:
        Q[:, 2] = -Q[:, 2]
    return Q


def fill_body(model: np.void, i: int, mass: float, centre: Array, I_centre: Array) -> None:
    """Set the inertia of body i from its mass, centre of mass and inertia tensor about that centre, all in body coordinates."""
    shift = mass * (centre @ centre * np.eye(3) - np.outer(centre, centre))
    model["mass"][i] = mass
    model["h"][i] = mass * centre
    model["I"][i] = (I_centre + shift)[np.triu_indices(3)]


def random_arm(seed: int, n: int | None = None, chain: bool = False) -> RandomArm:
    """The arm of this seed. Sizes go in turn from 1 to 10 joints; every third arm is a plain chain of revolute joints."""
    rng = np.random.default_rng([seed, 20])
    n = seed % 10 + 1 if n is None else n
    chain = chain or seed % 3 == 0
    model = new_block(MODEL)
    model["n"] = n
    model["gravity"] = rng.normal(size=3) * 6.0
    for i in range(n):
        model["parent"][i] = i - 1 if chain else rng.integers(max(-1, i - 4), i)
        model["kind"][i] = PRISMATIC if not chain and rng.random() < 0.4 else REVOLUTE
        model["R_parent"][i] = random_rotation(rng)
        model["p_parent"][i] = rng.uniform(-0.5, 0.5, 3)
        # A cloud of points has an inertia that a body can have; the last one may be small, as in a wrist.
        mass = 10.0 ** rng.uniform(-1.0, 1.0)
        points = rng.normal(size=(5, 3)) * 10.0 ** rng.uniform(-1.5, -0.5)
        points -= points.mean(axis=0)
        covariance = points.T @ points / 5.0
        I_centre = mass * (np.trace(covariance) * np.eye(3) - covariance)
        fill_body(model, i, mass, rng.uniform(-0.2, 0.2, 3), I_centre)
        model["rotor"][i] = rng.choice([0.0, 10.0 ** rng.uniform(-2.0, 0.5)])
        model["viscous"][i] = rng.uniform(0.0, 2.0)
        model["coulomb"][i] = rng.choice([0.0, rng.uniform(0.1, 5.0)])
        model["friction_speed"][i] = rng.uniform(0.01, 0.1)
    bodies = [-1, n - 1, int(rng.integers(0, n)), int(rng.integers(-1, n))]
    model["frame_count"] = len(bodies)
    for k, body in enumerate(bodies):
        model["frame_body"][k] = body
        model["R_body_frame"][k] = random_rotation(rng)
        model["p_body_frame"][k] = rng.uniform(-0.3, 0.3, 3)
    return RandomArm(n, model, ("stand", "tool", "camera", "probe"))


def random_state(seed: int, n: int, motion: int = 0) -> tuple[Array, Array, Array, Array]:
    """q, qd, qdd and tau of n joints; `motion` counts the states of one arm."""
    rng = np.random.default_rng([seed, motion, 21])
    return rng.uniform(-3.0, 3.0, n), rng.normal(size=n) * 2.0, rng.normal(size=n) * 5.0, rng.normal(size=n) * 20.0
