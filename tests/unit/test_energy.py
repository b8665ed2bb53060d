"""Kinetic and potential energy against closed forms."""

import math

import pytest

from rtctl.dynamics import energy
from tests.known_arms import LONG_TWO_LINK, STANDARD_GRAVITY, rod_pendulum, turntable_slider
from tests.sources import source

ROUNDING = 1e-13


@source("textbook mechanics", "uniform rod about its end; heights of its middle")
def test_rod() -> None:
    """A rod of 2 kg and 0.5 m: m L^2 w^2 / 6, and m g L/2 between hanging and level."""
    rod = rod_pendulum(2.0, 0.5)
    kinetic, level = energy(rod, [math.pi / 2], [3.0])
    assert kinetic == pytest.approx(2.0 * 0.25 * 9.0 / 6.0, rel=ROUNDING)
    _, hanging = energy(rod, [0.0], [0.0])
    assert level - hanging == pytest.approx(2.0 * STANDARD_GRAVITY * 0.25, rel=ROUNDING)


@source("textbook mechanics", "kinetic energy in plane polar coordinates")
def test_slider_on_a_turntable() -> None:
    """m (rd^2 + r^2 w^2) / 2 of the mass, and each rotor's own half rotor qd^2."""
    kinetic, potential = energy(turntable_slider(2.0, rotor=(0.7, 0.3)), [0.4, 0.6], [2.0, -0.4])
    assert kinetic == pytest.approx(0.5 * (2.0 * (0.16 + 0.36 * 4.0) + 0.7 * 4.0 + 0.3 * 0.16), rel=ROUNDING)
    assert potential == 0.0


@source("siciliano2009", "sec. 7.3.2: kinetic energy is qd' M qd / 2")
def test_two_link() -> None:
    """The energy of motion is half qd' M qd with the textbook's M; the energy of height is that of two centres of mass."""
    a = LONG_TWO_LINK
    q, qd = (0.4, -1.1), (1.7, -0.6)
    kinetic, potential = energy(a.arm, q, qd)
    M = a.inertia_matrix(q)
    assert kinetic == pytest.approx(0.5 * (M[0, 0] * 1.7**2 - 2.0 * M[0, 1] * 1.7 * 0.6 + M[1, 1] * 0.36), rel=ROUNDING)
    depth1, depth2 = a.lc1 * math.cos(0.4), a.l1 * math.cos(0.4) + a.lc2 * math.cos(0.4 - 1.1)
    assert potential == pytest.approx(-a.g * (a.m1 * depth1 + a.m2 * depth2), rel=ROUNDING)
