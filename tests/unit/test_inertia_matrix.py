"""Joint-space inertia matrix against closed forms."""

import numpy as np
import pytest

from rtctl.dynamics import inertia_matrix
from rtctl.kernels.inertia_matrix import inertia_matrix as kernel
from rtctl.kernels.layout import OK, SCRATCH, new_block
from tests.known_arms import DIRECT_DRIVE, LONG_TWO_LINK, TwoLink, rod_pendulum, turntable_slider
from tests.random_arms import random_arm, random_state
from tests.sources import source

ROUNDING = 1e-13  # a few tens of operations in float64
PRINTED = 1e-9  # ten digits behind the point


@source("kelly2005", "ch. 5: parameters of table 5.1; matrix computed from its closed form")
def test_published_two_link_arm() -> None:
    """The matrix of a published direct-drive arm comes out to every printed digit."""
    M = [[0.3484576312, 0.0192540946], [0.0192540946, 0.0126728380]]
    assert inertia_matrix(DIRECT_DRIVE.arm, (0.5, -1.0)) == pytest.approx(np.array(M), rel=0, abs=PRINTED)


@source("kelly2005", "table 5.3: bound n max|M_ij| of the largest eigenvalue, 0.7193 kg m^2 (from memory)")
def test_published_bound_of_the_largest_eigenvalue() -> None:
    """Twice the largest element, over all poses, is the book's bound."""
    largest = max(np.max(np.abs(inertia_matrix(DIRECT_DRIVE.arm, (0.0, q2)))) for q2 in np.linspace(-np.pi, np.pi, 721))
    assert 2.0 * largest == pytest.approx(0.7193, abs=5e-5)


@source("siciliano2009", "sec. 7.3.2, planar two-link arm")
@pytest.mark.parametrize("two_link", [DIRECT_DRIVE, LONG_TWO_LINK])
def test_two_link_closed_form(two_link: TwoLink) -> None:
    """All four elements follow the textbook, rotor inertia on the diagonal only."""
    for q in np.random.default_rng(2).uniform(-3, 3, (20, 2)):
        assert inertia_matrix(two_link.arm, q) == pytest.approx(two_link.inertia_matrix(q), rel=ROUNDING)


@source("textbook mechanics", "uniform rod about its end: m L^2 / 3")
def test_rod_about_its_end() -> None:
    """A uniform rod has the inertia m L^2 / 3 about its end, in every pose."""
    assert inertia_matrix(rod_pendulum(2.0, 0.5), [0.7]) == pytest.approx(np.array([[2.0 * 0.25 / 3.0]]), rel=ROUNDING)


@source("textbook mechanics", "kinetic energy in plane polar coordinates")
def test_slider_on_a_turntable() -> None:
    """A point mass at radius r: m r^2 and m on the diagonal, nothing beside it."""
    M = inertia_matrix(turntable_slider(2.0, rotor=(0.7, 0.3)), [0.4, 0.6])
    assert M == pytest.approx(np.array([[2.0 * 0.36 + 0.7, 0.0], [0.0, 2.3]]), rel=ROUNDING, abs=ROUNDING)


def test_joints_of_different_branches_do_not_couple() -> None:
    """The element of two joints is zero exactly when neither carries the other."""
    for seed in range(1, 20, 3):
        arm = random_arm(seed, n=8)
        M = inertia_matrix(arm, random_state(seed, 8)[0])
        carriers = []
        for i in range(8):
            k = int(arm.model["parent"][i])
            carriers.append({i} | (carriers[k] if k >= 0 else set()))
        related = np.array([[i in carriers[j] or j in carriers[i] for j in range(8)] for i in range(8)])
        assert ((M != 0.0) == related).all(), seed


def test_room_of_any_size() -> None:
    """A 16 x 16 result holds the same numbers in its corner, and the rest is left alone."""
    arm = random_arm(4)
    q = random_state(4, arm.n)[0]
    small, large = np.zeros((arm.n, arm.n)), np.full((16, 16), 7.0)
    for M in (small, large):
        assert kernel(arm.model, q, new_block(SCRATCH), M) == OK
    assert (large[: arm.n, : arm.n] == small).all() and (small == small.T).all()
    assert (large[arm.n :] == 7.0).all() and (large[:, arm.n :] == 7.0).all()
