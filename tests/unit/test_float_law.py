"""Float: gravity and damping, no reference."""

import numpy as np
import pytest

from tests.law_stand import LawStand, PlanarArm
from tests.sources import source

ROUNDING = 1e-12


@source("siciliano2009", "sec. 7.3.2: planar two-link arm in closed form")
def test_torque_is_gravity_minus_damping() -> None:
    """At the measured pose the torque is g(q) - 1.5 qd."""
    arm = PlanarArm()
    q, qd = np.array([0.7, -1.1]), np.array([0.4, -0.3])
    stand = LawStand("float", arm.model()).set(q=q, qd=qd)
    assert stand.call() == pytest.approx(arm.g(q) - 1.5 * qd, rel=ROUNDING)
    assert stand.term("damping") == pytest.approx(-1.5 * qd, rel=ROUNDING)


def test_reference_is_not_followed() -> None:
    """A reference, however far, changes nothing."""
    stand = LawStand("float", PlanarArm().model()).set(q=[0.7, -1.1])
    before = stand.call()
    assert np.array_equal(before, stand.set(q_ref=2.0, qd_ref=3.0, qdd_ref=4.0).call())
